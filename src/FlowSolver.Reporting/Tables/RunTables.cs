using System.Globalization;
using CsvHelper;
using FlowSolver.Grids;
using FlowSolver.Studies;
using FlowSolver.Transport;

namespace FlowSolver.Reporting.Tables;

/// <summary>The tables of a run. Column names and order are a contract with whoever reads the files.</summary>
public static class RunTables
{
    /// <summary><c>series</c>: one row for each time and method; the y columns only in two dimensions.</summary>
    public static Table Series(ComparisonResult result, CaseLabels? labels = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        var plane = result.Grid.Dimension == 2;
        var (length, energy, time) = Units(labels);
        var square = length is null ? null : length + "²";
        List<TableColumn> columns =
        [
            new("time", "time", time), new("method"), new("kind"), new("mass"), new("mean_x", "mean x", length), new("var_x", "variance x", square),
        ];
        if (plane)
            columns.AddRange([new("mean_y", "mean y", length), new("var_y", "variance y", square), new("cov_xy", "covariance", square)]);
        columns.AddRange(
        [
            new("entropy"), new("free_energy", "free energy", energy), new("relative_entropy", "relative entropy"),
            new("fisher_information", "Fisher information", length is null ? null : "1/" + square),
            new("w2_exact", "W2 to exact", length), new("w2_exact_low", "lower bound", length), new("w2_exact_high", "upper bound", length),
            new("tv_exact", "total variation to exact"),
        ]);
        var rows = new List<IReadOnlyList<Cell>>(result.Series.Count);
        foreach (var row in result.Series)
        {
            List<Cell> cells = [row.Time, row.Method, Kind(row.Kind), row.Moments.Mass, row.Moments.MeanX, row.Moments.VarianceX];
            if (plane)
                cells.AddRange([row.Moments.MeanY, row.Moments.VarianceY, row.Moments.Covariance]);
            cells.AddRange([row.Entropy, row.FreeEnergy, row.RelativeEntropy, row.FisherInformation]);
            cells.AddRange(Bracket(row.DistanceToExact));
            cells.Add(row.TotalVariationToExact);
            rows.Add(cells);
        }

        return new Table("series", columns, rows, "Every method at every report time.");
    }

    /// <summary><c>steps</c>: one row for each method and step.</summary>
    public static Table Steps(ComparisonResult result, CaseLabels? labels = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        var (length, energy, time) = Units(labels);
        return new Table(
            "steps",
            [
                new("method"), new("step"), new("time", "time", time), new("iterations"), new("residual"), new("dual_gap", "dual gap"),
                new("w2_step", "W2 of the step", length), new("free_energy", "free energy", energy),
            ],
            [.. result.Steps.Select(row => (IReadOnlyList<Cell>)[row.Method, row.Step, row.Time, row.Iterations, row.Residual, row.DualGap, row.StepDistance, row.FreeEnergy])],
            "Every step of every method.");
    }

    /// <summary><c>budget</c>: one row for each time and sampler.</summary>
    public static Table Budget(ComparisonResult result, CaseLabels? labels = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        var (length, _, time) = Units(labels);
        return new Table(
            "budget",
            [
                new("time", "time", time), new("sampler"), new("total_w2", "total", length), new("step_bias_w2", "step bias", length),
                new("noise_w2_mean", "noise, mean", length), new("noise_w2_p95", "noise, 95\u00a0%", length), new("grid_w2", "grid", length),
                new("p_value", "p-value"), new("verdict"),
            ],
            [.. result.Budget.Select(row => (IReadOnlyList<Cell>)[row.Time, row.Sampler, row.Total, row.StepBias, row.NoiseMean, row.Noise95, row.GridError, row.PValue, row.Verdict])],
            "What the distance of each ensemble from the exact flow is made of.");
    }

    /// <summary>
    /// Writes <c>density.csv</c> in one dimension: time, x, one column a flow method, equilibrium. A method that stopped early leaves its later
    /// cells empty. Written row by row: the table is never held in memory.
    /// </summary>
    /// <returns>The path.</returns>
    /// <exception cref="ArgumentException">The result is two-dimensional, or a density is not finite.</exception>
    public static string WriteDensityCsv(ComparisonResult result, string directory, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(directory);
        var path = Path.Combine(directory, "density.csv");
        using var stream = new FileStream(path, FileMode.Create, FileAccess.Write, FileShare.Read);
        WriteDensityCsv(result, stream, cancellation);
        return path;
    }

    /// <summary>The same to a stream, which stays open.</summary>
    public static void WriteDensityCsv(ComparisonResult result, Stream stream, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(stream);
        if (result.Grid.Dimension != 1)
            throw new ArgumentException("The grid had two axes; density.csv must have one. Two-dimensional densities go to density.h5.");
        using var writer = CsvWriter.Create(stream, TableWriter.CsvOptions, leaveOpen: true);
        writer.WriteField("time");
        writer.WriteField("x");
        foreach (var history in result.Densities)
            writer.WriteField(history.Method);
        writer.WriteField("equilibrium");
        writer.EndRecord();
        var centers = result.Grid.X.Centers();
        var positions = Array.ConvertAll(centers, Numbers.Exact);
        var equilibrium = Array.ConvertAll(result.Equilibrium.Values, value => Value(value, "equilibrium", null));
        for (var report = 0; report < ReachedReports(result); report++)
        {
            cancellation.ThrowIfCancellationRequested();
            var time = result.Plan.ReportTimes[report];
            var timeText = Numbers.Exact(time);
            for (var i = 0; i < positions.Length; i++)
            {
                writer.WriteField(timeText);
                writer.WriteField(positions[i]);
                foreach (var history in result.Densities)
                    writer.WriteField(report < history.Densities.Count ? Value(history.Densities[report].Values[i], history.Method, time) : "");
                writer.WriteField(equilibrium[i]);
                writer.EndRecord();
            }
        }
    }

    /// <summary>How many report times at least one flow method reached.</summary>
    public static int ReachedReports(ComparisonResult result)
    {
        ArgumentNullException.ThrowIfNull(result);
        return result.Densities.Count == 0 ? 0 : result.Densities.Max(history => history.Densities.Count);
    }

    internal static string Kind(SeriesKind kind) => kind == SeriesKind.Flow ? "flow" : "ensemble";

    internal static void CheckFinite(Density density, string method, double? time)
    {
        foreach (var value in density.Values)
        {
            if (!double.IsFinite(value))
                Value(value, method, time);
        }
    }

    private static string Value(double value, string method, double? time)
        => double.IsFinite(value)
            ? Numbers.Exact(value)
            : throw new ArgumentException(string.Create(CultureInfo.InvariantCulture,
                $"The density of '{method}'{(time is { } t ? " at time " + Numbers.Exact(t) : "")} was {Numbers.Name(value)} in a cell; it must be finite. A method that failed must end its history at the last time that it can be trusted."));

    private static IEnumerable<Cell> Bracket(TransportBracket? bracket)
        => bracket is { } known ? [known.Distance, known.Low, known.High] : [Cell.Empty, Cell.Empty, Cell.Empty];

    private static (string? Length, string? Energy, string? Time) Units(CaseLabels? labels) => (labels?.Length, labels?.Energy, labels?.Time);
}
