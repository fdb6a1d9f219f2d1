using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>Curves along one axis that show where samples and law differ; in two dimensions of the marginals.</summary>
/// <param name="Axis"><c>x</c> or <c>y</c>.</param>
/// <param name="BinEdges">Edges of the histogram, one more than bins.</param>
/// <param name="SampleDensity">Share of samples a unit of length in each bin.</param>
/// <param name="LawDensity">The same of the law.</param>
/// <param name="LawQuantiles">Quantiles of the law at 199 evenly spaced levels (0.5 % to 99.5 %).</param>
/// <param name="SampleQuantiles">Quantiles of the samples at the same levels.</param>
/// <param name="Positions">Positions at which the cumulative shares are compared.</param>
/// <param name="CumulativeDifference">Share of samples below a position minus that of the law.</param>
/// <param name="Band">Half width of the band that holds the whole difference of right samples 95 % of the time: 1.358/√N for N independent samples (A. Kolmogorov, G. Ist. Ital. Attuari 4 (1933) 83-91, asymptotic).</param>
public sealed record AuditCurves(
    string Axis, double[] BinEdges, double[] SampleDensity, double[] LawDensity, double[] LawQuantiles, double[] SampleQuantiles,
    double[] Positions, double[] CumulativeDifference, double Band)
{
    private const int MostBins = 80;
    private const int Levels = 199;

    /// <summary>Curves of every axis.</summary>
    internal static IReadOnlyList<AuditCurves> Of(AuditSamples set, Density law, double effectiveCount)
    {
        var list = new List<AuditCurves> { Along("x", set.X, Marginal(law, alongY: false), effectiveCount) };
        if (set.Y is not null)
            list.Add(Along("y", set.Y, Marginal(law, alongY: true), effectiveCount));
        return list;
    }

    private static Density Marginal(Density law, bool alongY)
    {
        if (law.Grid.Y is null)
            return law;
        var axis = alongY ? law.Grid.Y : law.Grid.X;
        var values = new double[axis.Cells];
        for (var cell = 0; cell < law.Values.Length; cell++)
            values[alongY ? cell / law.Grid.Nx : cell % law.Grid.Nx] += law.Values[cell] * (alongY ? law.Grid.X.Width : law.Grid.Y.Width);
        return new Density(new Grid(axis), values);
    }

    private static AuditCurves Along(string name, double[] samples, Density law, double effectiveCount)
    {
        var axis = law.Grid.X;
        var sorted = axis.IsPeriodic ? Array.ConvertAll(samples, axis.Interval.Fold) : (double[])samples.Clone();
        Array.Sort(sorted);
        var quantile = new QuantileFunction(law);
        var (low, high) = (Math.Min(quantile.Position(1e-4), sorted[(int)(1e-4 * (sorted.Length - 1))]), Math.Max(quantile.Position(1 - 1e-4), sorted[(int)((1 - 1e-4) * (sorted.Length - 1))]));
        var bins = (int)Math.Clamp(2 * Math.Cbrt(sorted.Length), 10, MostBins);
        var edges = new double[bins + 1];
        for (var b = 0; b <= bins; b++)
            edges[b] = low + (high - low) * b / bins;
        var width = (high - low) / bins;
        var sampleDensity = new double[bins];
        var lawDensity = new double[bins];
        for (var b = 0; b < bins; b++)
        {
            sampleDensity[b] = (ShareBelow(sorted, edges[b + 1]) - ShareBelow(sorted, edges[b])) / width;
            lawDensity[b] = (LawBelow(edges[b + 1]) - LawBelow(edges[b])) / width;
        }

        var lawQuantiles = new double[Levels];
        var sampleQuantiles = new double[Levels];
        for (var k = 0; k < Levels; k++)
        {
            var level = (k + 1.0) / (Levels + 1);
            lawQuantiles[k] = quantile.Position(level);
            sampleQuantiles[k] = sorted[Math.Min(sorted.Length - 1, (int)(level * sorted.Length))];
        }

        var positions = new double[241];
        var difference = new double[positions.Length];
        for (var k = 0; k < positions.Length; k++)
        {
            positions[k] = low + (high - low) * k / (positions.Length - 1);
            difference[k] = ShareBelow(sorted, positions[k]) - LawBelow(positions[k]);
        }

        return new AuditCurves(name, edges, sampleDensity, lawDensity, lawQuantiles, sampleQuantiles, positions, difference, 1.358 / Math.Sqrt(effectiveCount));

        double LawBelow(double position) => quantile.MassBelow(Math.Clamp(position, axis.Interval.From, axis.Interval.To));
    }

    private static double ShareBelow(double[] sorted, double position)
    {
        var (low, high) = (0, sorted.Length);
        while (low < high)
        {
            var middle = (low + high) >>> 1;
            if (sorted[middle] <= position)
                low = middle + 1;
            else
                high = middle;
        }

        return (double)low / sorted.Length;
    }
}
