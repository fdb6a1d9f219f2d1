using System.Globalization;
using System.Text;
using System.Text.Json.Nodes;
using FlowSolver.Diagnostics;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Reporting;
using FlowSolver.Reporting.Archives;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;
using FlowSolver.Transport;
using PureHDF;

namespace FlowSolver.Tests.Reporting;

/// <summary>
/// Golden text of the tables. Mutation tried: the invariant culture of <see cref="Numbers.Exact"/> replaced by the current one; the theories
/// over cultures fail (decimal commas).
/// </summary>
public sealed class RunTablesTests : IDisposable
{
    private readonly CultureInfo culture = CultureInfo.CurrentCulture;
    private readonly string directory = Directory.CreateTempSubdirectory("flowsolver-tables").FullName;

    public void Dispose()
    {
        CultureInfo.CurrentCulture = culture;
        Directory.Delete(directory, recursive: true);
    }

    // Cultures with decimal comma, Arabic digits and other minus signs, made by hand: the build carries no culture data.
    private static void UseCulture(string name)
    {
        var made = (CultureInfo)CultureInfo.InvariantCulture.Clone();
        made.NumberFormat = name switch
        {
            "comma" => new NumberFormatInfo { NumberDecimalSeparator = ",", NumberGroupSeparator = ".", PercentDecimalSeparator = "," },
            "minus" => new NumberFormatInfo { NegativeSign = "−", PositiveSign = "＋", NumberDecimalSeparator = "٫", NaNSymbol = "nicht" },
            _ => made.NumberFormat,
        };
        CultureInfo.CurrentCulture = made;
    }

    [Theory]
    [InlineData("invariant")]
    [InlineData("comma")]
    [InlineData("minus")]
    public void Series_OnALine_IsTheAgreedTextInEveryCulture(string name)
    {
        UseCulture(name);
        const string Expected =
            "time,method,kind,mass,mean_x,var_x,entropy,free_energy,relative_entropy,fisher_information,w2_exact,w2_exact_low,w2_exact_high,tv_exact\n"
            + "0,exact,flow,1,-1.5,0.04,-0.1903,1.25,2.5,1E-07,0,0,0,0\n"
            + "0.1,ula,ensemble,1,-1.2345678901234567,0.3,,,,,0.015,0.015,0.015,\n";
        Assert.Equal(Expected, TableWriter.Csv(RunTables.Series(Tiny(1))));
    }

    [Fact]
    public void Series_OnThePlane_HasTheColumnsOfBothAxesAndTheBracket()
    {
        const string Expected =
            "time,method,kind,mass,mean_x,var_x,mean_y,var_y,cov_xy,entropy,free_energy,relative_entropy,fisher_information,w2_exact,w2_exact_low,w2_exact_high,tv_exact\n"
            + "0,exact,flow,1,-1.5,0.04,0.25,0.5,-0.125,-0.1903,1.25,2.5,1E-07,0.02,0.019,0.021,0\n"
            + "0.1,ula,ensemble,1,-1.2345678901234567,0.3,0.25,0.5,-0.125,,,,,,,,\n";
        Assert.Equal(Expected, TableWriter.Csv(RunTables.Series(Tiny(2), SampleRuns.Labels)));
    }

    [Fact]
    public void StepsAndBudget_AreTheAgreedText()
    {
        Assert.Equal(
            "method,step,time,iterations,residual,dual_gap,w2_step,free_energy\njko,1,0.02,5,1E-13,,0.25,1.125\n",
            TableWriter.Csv(RunTables.Steps(Tiny(1))));
        Assert.Equal(
            "time,sampler,total_w2,step_bias_w2,noise_w2_mean,noise_w2_p95,grid_w2,p_value,verdict\n"
            + "0.1,ula,0.015,0.0125,0.004,0.006,,0.001,biased by the step\n",
            TableWriter.Csv(RunTables.Budget(Tiny(1))));
    }

    [Theory]
    [InlineData("invariant")]
    [InlineData("comma")]
    public void DensityCsv_HasOneColumnAMethodAndLeavesWhatWasNotReachedEmpty(string name)
    {
        UseCulture(name);
        using var stream = new MemoryStream();
        RunTables.WriteDensityCsv(Tiny(1), stream);
        const string Expected =
            "time,x,exact,jko,equilibrium\n"
            + "0,0.25,1,0.5,0.3\n0,0.75,2,0.5,0.3\n0,1.25,3,0.5,0.3\n0,1.75,4,0.5,0.3\n"
            + "0.1,0.25,0.1,,0.3\n0.1,0.75,1E-300,,0.3\n0.1,1.25,0,,0.3\n0.1,1.75,0.30000000000000004,,0.3\n";
        Assert.Equal(Expected, Encoding.UTF8.GetString(stream.ToArray()));
    }

    // Mutation tried: the check in the constructor of Table made void; both cases fail.
    [Theory]
    [InlineData(double.NaN, "not a number")]
    [InlineData(double.NegativeInfinity, "minus infinity")]
    public void Series_WithANumberThatIsNotFinite_IsRefusedWithThePlace(double value, string named)
    {
        var result = Tiny(1);
        var broken = result with { Series = [result.Series[0], result.Series[1] with { TotalVariationToExact = value }] };
        var error = Assert.Throws<ArgumentException>(() => RunTables.Series(broken));
        Assert.Equal($"Row 2, column 'tv_exact' of the table 'series' was {named}; it must be finite, or empty where the quantity does not exist.", error.Message);
    }

    [Fact]
    public void Densities_WithNaN_AreRefusedInBothFiles()
    {
        var result = Tiny(1);
        var broken = result with { Densities = [new DensityHistory("exact", [new Density(result.Grid, [0, double.NaN, 0, 0])])] };
        var csv = Assert.Throws<ArgumentException>(() => RunTables.WriteDensityCsv(broken, directory));
        Assert.StartsWith("The density of 'exact' at time 0 was not a number in a cell; it must be finite.", csv.Message);
        Assert.Throws<ArgumentException>(() => DensityArchive.Write(broken, directory));
    }

    [Fact]
    public void WriteAll_Twice_GivesTheSameBytesInEveryTable()
    {
        foreach (var run in (string[])["a", "b"])
        {
            Directory.CreateDirectory(Path.Combine(directory, run));
            RunWriter.WriteAll(SampleRuns.Line(40, 4), SampleRuns.Labels, SampleRuns.Provenance, Path.Combine(directory, run));
        }

        foreach (var name in (string[])["series.csv", "steps.csv", "budget.csv", "density.csv"])
        {
            var first = File.ReadAllBytes(Path.Combine(directory, "a", name));
            Assert.Equal(first, File.ReadAllBytes(Path.Combine(directory, "b", name)));
            Assert.DoesNotContain((byte)'\r', first);
            Assert.NotEqual(0xEF, first[0]);
        }
    }

    [Theory]
    [InlineData(0.1)]
    [InlineData(1.0 / 3)]
    [InlineData(-2.2250738585072014e-308)]
    [InlineData(5e-324)]
    [InlineData(1.7976931348623157e308)]
    [InlineData(123456789.125)]
    public void Exact_ReadsBackAsTheSameNumber(double value)
    {
        UseCulture("minus");
        Assert.Equal(value, double.Parse(Numbers.Exact(value), CultureInfo.InvariantCulture));
    }

    [Theory]
    [InlineData(0, "0")]
    [InlineData(-0.0, "0")]
    [InlineData(1, "1")]
    [InlineData(0.012344, "0.01234")]
    [InlineData(0.0123456, "0.01235")]
    [InlineData(-1.5, "-1.5")]
    [InlineData(99999, "100000")]
    [InlineData(123456, "123500")]
    [InlineData(1234567, "1.235e6")]
    [InlineData(0.00012, "0.00012")]
    [InlineData(0.000012, "1.2e-5")]
    [InlineData(3e-8, "3e-8")]
    public void Short_RoundsForReading(double value, string expected)
        => Assert.Equal(expected, Numbers.Short(value));

    [Fact]
    public void Archive_OnThePlane_ReadsBackWithTimeThenYThenX()
    {
        var result = SampleRuns.Plane(12, 3);
        using var file = H5File.OpenRead(DensityArchive.Write(result, directory));
        Assert.Equal(result.Grid.X.Centers(), file.Dataset("x").Read<double[]>());
        Assert.Equal(result.Grid.Y!.Centers(), file.Dataset("y").Read<double[]>());
        Assert.Equal(result.Plan.ReportTimes, file.Dataset("time").Read<double[]>());
        foreach (var history in result.Densities)
        {
            var dataset = file.Dataset(history.Method);
            Assert.Equal([3UL, 8UL, 12UL], dataset.Space.Dimensions);
            var values = dataset.Read<double[,,]>();
            Assert.Equal(history.Densities[2].Values[5 * 12 + 7], values[2, 5, 7]);
            Assert.Equal(history.Densities.SelectMany(density => density.Values), values.Cast<double>());
        }

        Assert.Equal([8UL, 12UL], file.Dataset("equilibrium").Space.Dimensions);
    }

    [Fact]
    public void Archive_OnALine_KeepsAShorterHistoryShorter()
    {
        using var file = H5File.OpenRead(DensityArchive.Write(Tiny(1), directory));
        Assert.Equal([2UL, 4UL], file.Dataset("exact").Space.Dimensions);
        Assert.Equal([1UL, 4UL], file.Dataset("jko").Space.Dimensions);
        Assert.False(file.LinkExists("y"));
    }

    [Fact]
    public void RunRecord_HoldsWhatIsNeededToRepeatTheRun()
    {
        var result = SampleRuns.Line(40, 4);
        var record = JsonNode.Parse(File.ReadAllText(RunRecord.Write(result, SampleRuns.Labels, SampleRuns.Provenance, directory, ["No PDF."])))!;
        Assert.Equal(1UL, record["seed"]!.GetValue<ulong>());
        Assert.Equal(2, record["threads"]!.GetValue<int>());
        Assert.Equal("0.1.0", record["versions"]!["flowsolver"]!.GetValue<string>());
        Assert.Equal(SampleRuns.Provenance.ResolvedCase, record["case_text"]!.GetValue<string>());
        Assert.Equal(0.5, record["timings"]!["ensembles"]!.GetValue<double>());
        Assert.Equal("µm", record["labels"]!["length"]!.GetValue<string>());
        Assert.Equal(["The step times the largest V'' is 0.05; the map does not fold.", "The tail mass at the upper wall is 3e-7.", "No PDF."],
            record["warnings"]!.AsArray().Select(warning => warning!["text"]!.GetValue<string>()));
        Assert.Single(record["estimators"]!.AsObject());
        Assert.Single(record["sources"]!.AsArray());
        Assert.True(record["complete"]!.GetValue<bool>());
        Assert.Equal(result.GridErrors[1]!.Value, record["grid_w2"]![1]!.GetValue<double>());
    }

    [Fact]
    public void MarkdownAndLatex_RoundEscapeAndLeaveGapsEmpty()
    {
        var table = new Table(
            "orders", [new("method"), new("error_w2", "error", "µm"), new("observed_order", "order")],
            [["a|b_c", 0.0123456, Cell.Empty], ["jko", 1.25e-7, 1.98765]], "Errors.");
        Assert.Equal(
            "| method | error (µm) | order |\n| ------ | ---------: | ----: |\n| a\\|b_c |    0.01235 |       |\n| jko    |    1.25e-7 | 1.988 |\n\nErrors.\n",
            TableWriter.Markdown(table));
        Assert.Equal(
            "% Errors.\n\\begin{tabular}{lrr}\n\\toprule\nmethod & error ($\\mu$m) & order \\\\\n\\midrule\n"
            + "a|b\\_c & $0.01235$ &  \\\\\njko & $1.25\\times 10^{-7}$ & $1.988$ \\\\\n\\bottomrule\n\\end{tabular}\n",
            TableWriter.Latex(table));
    }

    private static ComparisonResult Tiny(int dimension)
    {
        var sample = dimension == 1 ? SampleRuns.Line(8, 2) : SampleRuns.Plane(12, 2);
        var grid = dimension == 1 ? new Grid(new Axis(new Interval(0, 2), 4)) : sample.Grid;
        var moments = new Moments(1, -1.5, 0.04, 0.25, 0.5, -0.125);
        return sample with
        {
            Grid = grid,
            Plan = new TimePlan(0.1, [0, 0.1]),
            Equilibrium = dimension == 1 ? new Density(grid, [0.3, 0.3, 0.3, 0.3]) : sample.Equilibrium,
            Series =
            [
                new SeriesRow(0, "exact", SeriesKind.Flow, moments, -0.1903, 1.25, 2.5, 1e-7, dimension == 1 ? TransportBracket.Exact(0) : new TransportBracket(0.02, 0.019, 0.021), 0),
                new SeriesRow(0.1, "ula", SeriesKind.Ensemble, moments with { MeanX = -1.2345678901234567, VarianceX = 0.3 }, null, null, null, null, dimension == 1 ? TransportBracket.Exact(0.015) : null, null),
            ],
            Steps = [new StepRow("jko", 1, 0.02, 5, 1e-13, null, 0.25, 1.125)],
            Budget = [new BudgetRow(0.1, "ula", 0.015, 0.0125, 0.004, 0.006, null, 0.001, "biased by the step")],
            Densities = dimension == 1
                ? [new DensityHistory("exact", [new Density(grid, [1, 2, 3, 4]), new Density(grid, [0.1, 1e-300, -0.0, 0.1 + 0.2])]), new DensityHistory("jko", [new Density(grid, [0.5, 0.5, 0.5, 0.5])])]
                : sample.Densities,
        };
    }
}
