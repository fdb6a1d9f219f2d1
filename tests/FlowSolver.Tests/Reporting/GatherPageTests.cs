using FlowSolver.Foundation;
using FlowSolver.Reporting;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;

namespace FlowSolver.Tests.Reporting;

public sealed class GatherPageTests : IDisposable
{
    private readonly string directory = Directory.CreateTempSubdirectory("flowsolver-gather").FullName;

    public void Dispose() => Directory.Delete(directory, recursive: true);

    private string Written(string name, double step, CaseLabels? labels = null)
    {
        var folder = Directory.CreateDirectory(Path.Combine(directory, name)).FullName;
        RunWriter.WriteAll(SampleRuns.Line(60, 7, step), labels ?? SampleRuns.Labels, SampleRuns.Provenance, folder, formats: FigureFormats.Svg);
        return folder;
    }

    // Mutation tried: the worst row of a method replaced by its first; fails on the headline.
    [Fact]
    public void Model_OfTwoSteps_NamesWhatDiffersAndWhereEachMethodIsClosest()
    {
        var page = GatherPage.Model([Written("coarse", 0.1), Written("fine", 0.025)]);
        var fine = SampleRuns.Line(60, 7, 0.025).Series.Where(row => row.Method != "exact" && row.Time > 0).GroupBy(row => row.Method)
            .Select(group => group.MaxBy(row => row.DistanceToExact!.Value.Distance)!).MinBy(row => row.DistanceToExact!.Value.Distance)!;
        Assert.StartsWith($"Closest to its exact flow: {fine.Method} in fine, at most {Numbers.Short(fine.DistanceToExact!.Value.Distance, 3)}", page.Verdict.Headline, StringComparison.Ordinal);
        var differences = page.Sections.OfType<TableSection>().First();
        var row = Assert.Single(differences.Table.Rows);
        Assert.Equal(["step", "0.1", "0.025"], row.Select(cell => cell.ToString()));
        Assert.Contains("temperature 0.4", differences.Lead, StringComparison.Ordinal);
        Assert.All(page.Verdict.Reasons, reason => Assert.Contains("closest in fine", reason, StringComparison.Ordinal));
        Assert.Equal(6, page.Sections.OfType<ChartSection>().Count());
        Assert.Contains("<h1>2 runs compared</h1>", PageWriter.Html(page), StringComparison.Ordinal);
    }

    [Fact]
    public void Model_OfFoldersOfOneName_KeepsThemApart()
    {
        Directory.CreateDirectory(Path.Combine(directory, "a"));
        Directory.CreateDirectory(Path.Combine(directory, "b"));
        var page = GatherPage.Model([Written(Path.Combine("a", "bead"), 0.1), Written(Path.Combine("b", "bead"), 0.05)]);
        Assert.Contains("bead and bead (2)", page.Question, StringComparison.Ordinal);
    }

    [Fact]
    public void Model_OfDifferentUnits_SaysThatTheyMustNotBeCompared()
    {
        var page = GatherPage.Model([Written("one", 0.1), Written("two", 0.05, new CaseLabels("m", "kT", "s"))]);
        Assert.Contains(page.Sections.OfType<RemarksSection>().Single().Remarks, remark => remark.IsFailure && remark.Text.Contains("different units", StringComparison.Ordinal));
    }

    [Theory]
    [InlineData("run.json", null, "The folder holds no run.json.")]
    [InlineData("series.csv", null, "The folder holds no series.csv.")]
    [InlineData("run.json", "{ \"seed\": ", "The file is not valid JSON.")]
    [InlineData("run.json", "[1]", "The file holds no JSON object.")]
    [InlineData("series.csv", "time,method\n0,exact\n", "The file has no column 'kind'.")]
    [InlineData("series.csv", "time,method,kind,free_energy,relative_entropy,w2_exact\n0,exact,flow,much,,\n", "The cell 'free_energy' was 'much'; it must be a number or empty.")]
    [InlineData("series.csv", "time,method,kind,free_energy,relative_entropy,w2_exact\n0,exact,flow,NaN,,\n", "The cell 'free_energy' was 'NaN'; it must be a number or empty.")]
    [InlineData("series.csv", "", "The file has no column 'time'.")]
    public void Read_OfABrokenRun_SaysWhichFileAndWhy(string name, string? content, string message)
    {
        var folder = Written("run", 0.1);
        if (content is null)
            File.Delete(Path.Combine(folder, name));
        else
            File.WriteAllText(Path.Combine(folder, name), content);
        var fault = Assert.Single(Assert.Throws<InputException>(() => GatheredRun.Read(folder)).Faults);
        Assert.Equal(message, fault.Message);
        Assert.StartsWith(folder, fault.File, StringComparison.Ordinal);
    }

    [Fact]
    public void Model_OfNoOrOneOrAMissingFolder_IsRefused()
    {
        Assert.Throws<InputException>(() => GatherPage.Model((IReadOnlyList<string>)[]));
        Assert.Throws<InputException>(() => GatherPage.Model([Written("only", 0.1)]));
        Assert.Equal("The folder was not found.", Assert.Single(Assert.Throws<InputException>(() => GatheredRun.Read(Path.Combine(directory, "none"))).Faults).Message);
    }
}
