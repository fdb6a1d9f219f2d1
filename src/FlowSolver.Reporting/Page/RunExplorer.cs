using System.Buffers.Binary;
using System.Globalization;
using System.Text;
using System.Text.Json;
using FlowSolver.Grids;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Page;

/// <summary>
/// What the interactive part of a run's page needs, thinned by a rule that the page states. Numbers of the series and of the error budget are
/// never thinned in digits: they are those of the tables.
/// </summary>
public sealed class RunExplorer
{
    private const int MostTimes = 61;
    private const int MostCellsOnALine = 640;
    private const int MostCellsOnAPlane = 96;
    private const int MostWalkers = 300;
    private const long MostMapBytes = 2_400_000;

    private readonly ComparisonResult result;
    private readonly CaseLabels labels;
    private readonly IReadOnlyList<TransportPicture> maps;
    private readonly FigureStyle style;
    private readonly MethodLooks looks;
    private readonly IReadOnlyList<int> reports;
    private readonly int stride;

    /// <summary>Decides what is shown.</summary>
    public RunExplorer(ComparisonResult result, CaseLabels labels, IReadOnlyList<TransportPicture>? maps = null, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        this.result = result;
        this.labels = labels;
        this.maps = maps ?? [];
        this.style = style ?? FigureStyle.Default;
        looks = new MethodLooks(result, this.style);
        var grid = result.Grid;
        var reached = Math.Max(RunTables.ReachedReports(result), result.Series.Select(row => row.Time).Distinct().Count());
        reached = Math.Min(reached, result.Plan.ReportTimes.Count);
        var mostTimes = MostTimes;
        if (grid.Dimension == 1)
        {
            stride = (grid.Nx + MostCellsOnALine - 1) / MostCellsOnALine;
        }
        else
        {
            stride = (Math.Max(grid.Nx, grid.Ny) + MostCellsOnAPlane - 1) / MostCellsOnAPlane;
            var bytes = Math.Max(1, result.Densities.Count) * (long)Blocks(grid.Nx) * Blocks(grid.Ny) * 8 / 3;
            mostTimes = (int)Math.Clamp(MostMapBytes / Math.Max(1, bytes), 3, MostTimes);
        }

        reports = Thinned(reached, mostTimes);
    }

    /// <summary>What was left out, as a sentence; null where everything is shown.</summary>
    public string? ThinningRule
    {
        get
        {
            var parts = new List<string>();
            var file = result.Grid.Dimension == 1 ? "density.csv" : "density.h5";
            if (stride > 1)
            {
                parts.Add(result.Grid.Dimension == 1
                    ? string.Create(CultureInfo.InvariantCulture, $"every {Ordinal(stride)} cell of the densities")
                    : string.Create(CultureInfo.InvariantCulture, $"densities averaged over blocks of {stride} × {stride} cells"));
            }

            if (reports.Count < result.Plan.ReportTimes.Count && reports.Count > 1)
                parts.Add(string.Create(CultureInfo.InvariantCulture, $"{reports.Count} of {result.Plan.ReportTimes.Count} report times"));
            var digits = result.Grid.Dimension == 1
                ? "Densities on this page carry 6 significant digits"
                : "Density maps on this page carry 1/65535 of their greatest value";
            return (parts.Count > 0 ? "This page shows " + string.Join(" and ", parts) + ". " : "") + digits + "; " + file + " holds everything.";
        }
    }

    private int Blocks(int cells) => (cells + stride - 1) / stride;

    private static string Ordinal(int number) => number switch { 2 => "2nd", 3 => "3rd", _ => number.ToString(CultureInfo.InvariantCulture) + "th" };

    private static IReadOnlyList<int> Thinned(int count, int most)
    {
        if (count <= most)
            return [.. Enumerable.Range(0, count)];
        var step = (count - 1 + most - 2) / (most - 1);
        var kept = new List<int>();
        for (var i = 0; i < count - 1; i += step)
            kept.Add(i);
        kept.Add(count - 1);
        return kept;
    }

    /// <summary>Writes the data as JSON.</summary>
    internal void Write(Utf8JsonWriter json)
    {
        var plane = result.Grid.Dimension == 2;
        json.WriteStartObject();
        json.WriteString("kind", plane ? "plane" : "line");
        json.WriteStartObject("labels");
        json.WriteString("length", labels.Length);
        json.WriteString("energy", labels.Energy);
        json.WriteString("time", labels.Time);
        json.WriteString("density", labels.Density(result.Grid.Dimension));
        json.WriteEndObject();
        json.WriteNumber("temperature", result.Problem.Temperature);
        json.WriteNumber("walkers", result.WalkerCount);
        PageJson.Numbers(json, "times", reports.Select(report => result.Plan.ReportTimes[report]));
        json.WriteStartArray("methods");
        foreach (var name in looks.Order)
        {
            json.WriteStartObject();
            json.WriteString("name", name);
            json.WriteString("kind", result.Densities.Any(history => history.Method == name) || result.Series.Any(row => row.Method == name && row.Kind == SeriesKind.Flow) ? "flow" : "ensemble");
            json.WritePropertyName("look");
            PageJson.Look(json, looks[name]);
            json.WriteEndObject();
        }

        json.WriteEndArray();
        PageJson.Table(json, "series", RunTables.Series(result, labels), KeptTimes());
        PageJson.Table(json, "budget", RunTables.Budget(result, labels), KeptTimes());
        if (plane)
            WritePlane(json);
        else
            WriteLine(json);
        json.WriteEndObject();
    }

    private HashSet<double> KeptTimes() => [.. reports.Select(report => result.Plan.ReportTimes[report])];

    private void WriteLine(Utf8JsonWriter json)
    {
        var grid = result.Grid;
        var centers = grid.X.Centers();
        PageJson.Numbers(json, "x", Kept(centers));
        json.WritePropertyName("equilibrium");
        json.WriteStartObject();
        PageJson.Numbers(json, "values", Kept(result.Equilibrium.Values), 6);
        json.WritePropertyName("look");
        PageJson.Look(json, style.Equilibrium);
        json.WriteEndObject();
        var potential = grid.Sample(result.Problem.Potential.Value);
        PageJson.Numbers(json, "potential", Kept(potential), 6);
        json.WriteStartObject("densities");
        foreach (var history in result.Densities)
        {
            json.WriteStartArray(history.Method);
            foreach (var report in reports.Where(report => report < history.Densities.Count))
                PageJson.Numbers(json, null, Kept(history.Densities[report].Values), 6);
            json.WriteEndArray();
        }

        json.WriteEndObject();
        WriteWalkers(json);

        IEnumerable<double> Kept(double[] values)
        {
            for (var i = 0; i < values.Length; i += stride)
                yield return values[i];
        }
    }

    private void WriteWalkers(Utf8JsonWriter json)
    {
        json.WriteStartObject("walkersShown");
        foreach (var walkers in result.Walkers)
        {
            json.WriteStartObject(walkers.Sampler);
            Coordinates("x", walkers.X);
            if (result.Grid.Dimension == 2)
                Coordinates("y", walkers.Y);
            json.WriteEndObject();
        }

        json.WriteEndObject();

        void Coordinates(string name, IReadOnlyList<double[]> values)
        {
            json.WriteStartArray(name);
            foreach (var report in reports.Where(report => report < values.Count))
                PageJson.Numbers(json, null, values[report].Take(MostWalkers), 5);
            json.WriteEndArray();
        }
    }

    private void WritePlane(Utf8JsonWriter json)
    {
        var grid = result.Grid;
        var (nx, ny) = (Blocks(grid.Nx), Blocks(grid.Ny));
        json.WriteNumber("nx", nx);
        json.WriteNumber("ny", ny);
        // The last block of an axis may reach past its end; positions are those of full blocks.
        PageJson.Numbers(json, "extent", [grid.X.Interval.From, grid.X.Interval.To, grid.Y!.Interval.From, grid.Y.Interval.To]);
        PageJson.Numbers(json, "block", [grid.X.Width * stride, grid.Y.Width * stride]);
        var potential = grid.Sample(result.Problem.Potential.Value);
        var least = potential.Min();
        PageJson.Numbers(json, "potential", Averaged(grid, potential), 6);
        PageJson.Numbers(json, "levels", style.LevelsInTemperature.Select(level => least + level * result.Problem.Temperature));
        PageJson.Numbers(json, "levelsInTemperature", style.LevelsInTemperature);
        json.WriteStartArray("mapColors");
        foreach (var color in style.MapColors)
            json.WriteStringValue(color);
        json.WriteEndArray();
        json.WriteStartArray("mapColorsDark");
        foreach (var color in style.MapColorsDark)
            json.WriteStringValue(color);
        json.WriteEndArray();
        json.WriteStartObject("densities");
        foreach (var history in result.Densities)
        {
            json.WriteStartArray(history.Method);
            foreach (var report in reports.Where(report => report < history.Densities.Count))
                WriteMap(json, Averaged(grid, history.Densities[report].Values));
            json.WriteEndArray();
        }

        json.WriteEndObject();
        WriteWalkers(json);
        json.WriteStartArray("transport");
        foreach (var map in maps)
        {
            json.WriteStartObject();
            json.WriteString("title", map.Title);
            json.WriteString("method", map.Method);
            json.WriteNumber("from", map.FromTime);
            json.WriteNumber("to", map.ToTime);
            PageJson.Numbers(json, "arrows", RunFigures.ArrowsOf(map, 9).SelectMany(arrow => (double[])[arrow.FromX, arrow.FromY, arrow.ToX, arrow.ToY]), 5);
            json.WriteEndObject();
        }

        json.WriteEndArray();
    }

    // A map in 65535 steps of its greatest value: small, and finer than any screen shows.
    private static void WriteMap(Utf8JsonWriter json, double[] values)
    {
        var greatest = Math.Max(values.Max(), double.Epsilon);
        var bytes = new byte[values.Length * 2];
        for (var i = 0; i < values.Length; i++)
            BinaryPrimitives.WriteUInt16LittleEndian(bytes.AsSpan(2 * i), (ushort)Math.Round(65535 * Math.Clamp(values[i] / greatest, 0, 1)));
        json.WriteStartObject();
        json.WriteNumber("max", greatest);
        json.WriteBase64String("data", bytes);
        json.WriteEndObject();
    }

    private double[] Averaged(Grid grid, double[] values)
    {
        if (stride == 1)
            return values;
        var (nx, ny) = (Blocks(grid.Nx), Blocks(grid.Ny));
        var sums = new double[nx * ny];
        var counts = new int[nx * ny];
        for (var row = 0; row < grid.Ny; row++)
        {
            for (var i = 0; i < grid.Nx; i++)
            {
                var block = row / stride * nx + i / stride;
                sums[block] += values[row * grid.Nx + i];
                counts[block]++;
            }
        }

        for (var i = 0; i < sums.Length; i++)
            sums[i] /= counts[i];
        return sums;
    }
}

/// <summary>Small pieces of the page's JSON.</summary>
internal static class PageJson
{
    /// <summary>An array of numbers; all digits, or so many significant ones.</summary>
    public static void Numbers(Utf8JsonWriter json, string? name, IEnumerable<double> values, int? digits = null)
    {
        if (name is not null)
            json.WriteStartArray(name);
        else
            json.WriteStartArray();
        var format = digits is { } count ? "G" + count.ToString(CultureInfo.InvariantCulture) : null;
        foreach (var value in values)
        {
            if (!double.IsFinite(value))
                json.WriteNullValue();
            else if (format is null)
                json.WriteRawValue(Reporting.Numbers.Exact(value), skipInputValidation: true);
            else
                json.WriteRawValue(value.ToString(format, CultureInfo.InvariantCulture), skipInputValidation: true);
        }

        json.WriteEndArray();
    }

    /// <summary>A look.</summary>
    public static void Look(Utf8JsonWriter json, CurveLook look)
    {
        json.WriteStartObject();
        json.WriteString("color", look.Color);
        json.WriteString("dark", look.DarkColor);
        json.WriteNumber("width", look.Width);
        Numbers(json, "dash", look.Dash);
        json.WriteString("marker", look.Marker.ToString());
        json.WriteEndObject();
    }

    /// <summary>A table with all its digits; rows whose first or time column is not among <paramref name="times"/> are left out.</summary>
    public static void Table(Utf8JsonWriter json, string name, Table table, HashSet<double>? times = null)
    {
        json.WriteStartObject(name);
        json.WriteStartArray("columns");
        foreach (var column in table.Columns)
            json.WriteStringValue(column.Name);
        json.WriteEndArray();
        var time = table.Columns.ToList().FindIndex(column => column.Name == "time");
        json.WriteStartArray("rows");
        foreach (var row in table.Rows)
        {
            if (times is not null && time >= 0 && row[time].Number is { } at && !times.Contains(at))
                continue;
            json.WriteStartArray();
            foreach (var cell in row)
            {
                if (cell.Number is { } number)
                    json.WriteRawValue(Reporting.Numbers.Exact(number), skipInputValidation: true);
                else if (cell.Text is { } text)
                    json.WriteStringValue(text);
                else
                    json.WriteNullValue();
            }

            json.WriteEndArray();
        }

        json.WriteEndArray();
        json.WriteEndObject();
    }

    /// <summary>A panel of curves.</summary>
    public static void Chart(Utf8JsonWriter json, LinePanel panel)
    {
        json.WriteStartObject();
        json.WriteString("title", panel.Title);
        json.WriteString("xTitle", panel.XTitle);
        json.WriteString("yTitle", panel.YTitle);
        json.WriteBoolean("xLog", panel.XIsLogarithmic);
        json.WriteBoolean("yLog", panel.YIsLogarithmic);
        Optional("xFrom", panel.XFrom);
        Optional("xTo", panel.XTo);
        Optional("yFrom", panel.YFrom);
        Optional("yTo", panel.YTo);
        json.WriteStartArray("curves");
        foreach (var curve in panel.Curves)
        {
            json.WriteStartObject();
            json.WriteString("label", curve.Label);
            Numbers(json, "x", curve.X);
            Numbers(json, "y", curve.Y);
            json.WriteBoolean("stairs", curve.IsStairs);
            json.WritePropertyName("look");
            Look(json, curve.Look);
            json.WriteEndObject();
        }

        json.WriteEndArray();
        json.WriteStartArray("bands");
        foreach (var band in panel.Bands)
        {
            json.WriteStartObject();
            json.WriteString("label", band.Label);
            Numbers(json, "x", band.X);
            if (band.Low is not null)
                Numbers(json, "low", band.Low);
            Numbers(json, "high", band.High);
            json.WriteEndObject();
        }

        json.WriteEndArray();
        json.WriteEndObject();

        void Optional(string name, double? value)
        {
            if (value is { } number)
                json.WriteNumber(name, number);
        }
    }

    /// <summary>JSON text that may stand inside a script element: no character of it can end the element.</summary>
    public static string Text(Action<Utf8JsonWriter> write)
    {
        using var stream = new MemoryStream();
        using (var json = new Utf8JsonWriter(stream))
            write(json);
        return Encoding.UTF8.GetString(stream.GetBuffer(), 0, (int)stream.Length);
    }
}
