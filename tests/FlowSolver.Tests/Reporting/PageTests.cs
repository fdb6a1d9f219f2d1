using System.Globalization;
using System.Text.Json.Nodes;
using System.Text.RegularExpressions;
using FlowSolver.Reporting;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Studies;

namespace FlowSolver.Tests.Reporting;

public sealed class PageTests : IDisposable
{
    private readonly string directory = Directory.CreateTempSubdirectory("flowsolver-page").FullName;

    public void Dispose() => Directory.Delete(directory, recursive: true);

    private static string Html(int dimension)
    {
        var result = dimension == 1 ? SampleRuns.Line() : SampleRuns.Plane();
        var maps = dimension == 1 ? null : new[] { SampleRuns.Map(result, 0, 3) };
        return PageWriter.Html(RunPage.Model(result, SampleRuns.Labels, SampleRuns.Provenance, maps));
    }

    private static JsonNode Data(string html)
        => JsonNode.Parse(Regex.Match(html, "<script type=\"application/json\" id=\"data\">(.*?)</script>", RegexOptions.Singleline).Groups[1].Value)!;

    [Theory]
    [InlineData(1)]
    [InlineData(2)]
    public void Html_NeedsNothingFromOutside(int dimension)
    {
        var html = Html(dimension);
        if (Environment.GetEnvironmentVariable("FLOWSOLVER_FIGURES") is { } kept)
            File.WriteAllText(Path.Combine(Directory.CreateDirectory(kept).FullName, $"page{dimension}.html"), html);
        // Names of XML namespaces and the library's own comment are not addresses that are asked for.
        var addresses = Regex.Matches(html, "(?:https?:)?//[a-z0-9][a-z0-9.-]*\\.[a-z]{2,}[^\"' )<]*", RegexOptions.IgnoreCase).Select(match => match.Value)
            .Where(address => !address.StartsWith("http://www.w3.org/2000/svg", StringComparison.Ordinal) && address != "https://github.com/leeoniya/uPlot");
        Assert.Empty(addresses);
        Assert.DoesNotMatch("<(script|img|link|iframe)[^>]+(src|href)=\"(?!data:)", html);
        Assert.DoesNotContain("@import", html, StringComparison.Ordinal);
        Assert.Contains("default-src 'none'", html, StringComparison.Ordinal);
        Assert.Contains("Permission is hereby granted", html, StringComparison.Ordinal);
        Assert.True(html.Length < 5_000_000, $"The page had {html.Length} characters.");
        Assert.DoesNotContain("{{", Regex.Replace(html, "<script.*?</script>|<style.*?</style>", "", RegexOptions.Singleline), StringComparison.Ordinal);
    }

    // Mutation tried: the numbers of the page's tables rounded to 6 digits; fails.
    [Theory]
    [InlineData(1)]
    [InlineData(2)]
    public void Data_CarriesTheNumbersOfTheTables(int dimension)
    {
        var result = dimension == 1 ? SampleRuns.Line() : SampleRuns.Plane();
        var explorer = Data(Html(dimension))["explorers"]!.AsObject().Single().Value!;
        Assert.Equal(result.Plan.ReportTimes, explorer["times"]!.AsArray().Select(time => time!.GetValue<double>()));
        Assert.Equal(
            result.Series.Select(row => row.DistanceToExact?.Distance),
            Column(explorer["series"]!, "w2_exact"));
        Assert.Equal(result.Series.Select(row => row.FreeEnergy), Column(explorer["series"]!, "free_energy"));
        Assert.Equal(result.Budget.Select(row => row.Total), Column(explorer["budget"]!, "total_w2"));

        static IEnumerable<double?> Column(JsonNode table, string name)
        {
            var at = table["columns"]!.AsArray().Select(column => column!.GetValue<string>()).ToList().IndexOf(name);
            return table["rows"]!.AsArray().Select(row => row![at]?.GetValue<double>());
        }
    }

    [Fact]
    public void Data_OfAPlane_HoldsEveryMapInSteps()
    {
        var result = SampleRuns.Plane();
        var explorer = Data(Html(2))["explorers"]!.AsObject().Single().Value!;
        var map = explorer["densities"]!["jko"]![3]!;
        var bytes = Convert.FromBase64String(map["data"]!.GetValue<string>());
        var values = result.Densities.Single(history => history.Method == "jko").Densities[3].Values;
        var greatest = map["max"]!.GetValue<double>();
        Assert.Equal(values.Max(), greatest);
        for (var i = 0; i < values.Length; i++)
            Assert.Equal(values[i], BitConverter.ToUInt16(bytes, 2 * i) / 65535.0 * greatest, greatest / 65535);
    }

    [Fact]
    public void Explorer_OfALargeRun_ThinsAndSaysSo()
    {
        var result = SampleRuns.Line(2000, 101, 0.03);
        var page = RunPage.Model(result, SampleRuns.Labels, SampleRuns.Provenance);
        var rule = page.Sections.OfType<TextSection>().Single(section => section.Title == "Limits").Paragraphs[^1];
        Assert.Equal("This page shows every 4th cell of the densities and 51 of 101 report times. Densities on this page carry 6 significant digits; density.csv holds everything.", rule);
        var html = PageWriter.Html(page);
        Assert.True(html.Length < 5_000_000);
        var explorer = Data(html)["explorers"]!.AsObject().Single().Value!;
        Assert.Equal(500, explorer["x"]!.AsArray().Count);
        Assert.Equal(3.0, explorer["times"]!.AsArray()[^1]!.GetValue<double>());
    }

    [Fact]
    public void Verdict_NamesTheFurthestMethodTheAmountAndTheCause()
    {
        var verdict = RunFindings.Verdict(SampleRuns.Line(), SampleRuns.Labels);
        verdict = verdict with { Headline = verdict.Headline.Replace('\u00a0', ' ') };
        Assert.Equal(VerdictTone.Attention, verdict.Tone);
        var worst = SampleRuns.Line().Series.Where(row => row.Method != "exact").MaxBy(row => row.DistanceToExact!.Value.Distance)!;
        Assert.StartsWith($"{worst.Method} is furthest off: {Numbers.Short(worst.DistanceToExact!.Value.Distance, 3)} µm from the exact flow at t = {Numbers.Short(worst.Time)} s (", verdict.Headline, StringComparison.Ordinal);
        Assert.Contains("by the bias of its step", verdict.Headline, StringComparison.Ordinal);
        var jko = Assert.Single(verdict.Reasons, reason => reason.StartsWith("jko: ", StringComparison.Ordinal));
        Assert.Contains("the time step is the cause", jko, StringComparison.Ordinal);
    }

    [Fact]
    public void Verdict_WhenGridAndNoiseExplainEverything_IsSound()
    {
        var sample = SampleRuns.Line();
        var quiet = sample with
        {
            GridErrors = [.. sample.GridErrors.Select(_ => (double?)1.0)],
            Budget = [.. sample.Budget.Select(row => row with { Verdict = "within noise" })],
        };
        var verdict = RunFindings.Verdict(quiet, SampleRuns.Labels);
        Assert.Equal(VerdictTone.Sound, verdict.Tone);
        Assert.Equal("No method differs from the exact flow by more than grid error and noise explain.", verdict.Headline);
    }

    [Fact]
    public void Verdict_OfAFailedOrInterruptedRun_SaysSoFirst()
    {
        var failed = SampleRuns.Line() with { Remarks = [new Remark("jko", 0.4, "The gap of a step was 0.01.", true)] };
        var verdict = RunFindings.Verdict(failed, SampleRuns.Labels);
        Assert.Equal(VerdictTone.Failed, verdict.Tone);
        Assert.Equal("jko could not be trusted to the end. The rest stands.", verdict.Headline);
        Assert.StartsWith("jko failed at t = 0.4 s: The gap of a step was 0.01.", verdict.Reasons[0].Replace('\u00a0', ' '), StringComparison.Ordinal);
        Assert.Equal(VerdictTone.Failed, RunFindings.Verdict(SampleRuns.Line() with { Interrupted = true }, SampleRuns.Labels).Tone);
    }

    // Found by a run in the plane whose ensembles had no distance: the verdict fell over it.
    [Theory]
    [InlineData(1)]
    [InlineData(2)]
    public void Page_OfARunThatLacksWhateverMayBeMissing_IsStillWritten(int dimension)
    {
        var sample = dimension == 1 ? SampleRuns.Line() : SampleRuns.Plane();
        var bare = sample with
        {
            Series = [.. sample.Series.Select(row => new SeriesRow(row.Time, row.Method, row.Kind, row.Moments, null, null, null, null, null, null))],
            Budget = [.. sample.Budget.Select(row => new BudgetRow(row.Time, row.Sampler, null, null, null, null, null, null, "not measured"))],
            GridErrors = [.. sample.GridErrors.Select(_ => (double?)null)],
            Steps = [.. sample.Steps.Select(row => row with { Residual = null, DualGap = null, StepDistance = null })],
        };
        RunWriter.WriteAll(bare, CaseLabels.None, SampleRuns.Provenance, directory, formats: FigureFormats.Svg);
        var verdict = RunFindings.Verdict(bare, CaseLabels.None);
        Assert.Equal("No distance from the exact flow was measured.", verdict.Headline);
        // Only the ensembles' distances missing.
        var part = sample with
        {
            Series = [.. sample.Series.Select(row => row.Kind == SeriesKind.Ensemble ? row with { DistanceToExact = null } : row)],
            Budget = bare.Budget,
        };
        Assert.EndsWith("Not measured: ula and proximal-ula.", RunFindings.Verdict(part, CaseLabels.None).Headline, StringComparison.Ordinal);
        RunWriter.WriteAll(part, CaseLabels.None, SampleRuns.Provenance, directory, formats: FigureFormats.Svg);
        // Stopped early: fewer densities, series and grid errors than the plan; one method shorter than the rest.
        var times = sample.Plan.ReportTimes.Take(3).ToHashSet();
        var stopped = sample with
        {
            Series = [.. sample.Series.Where(row => times.Contains(row.Time))],
            Budget = [.. sample.Budget.Where(row => times.Contains(row.Time))],
            GridErrors = [.. sample.GridErrors.Take(3)],
            Densities = [.. sample.Densities.Select((history, i) => history with { Densities = [.. history.Densities.Take(i == 1 ? 1 : 3)] })],
            Walkers = [.. sample.Walkers.Select(walkers => walkers with { X = [.. walkers.X.Take(3)], Y = [.. walkers.Y.Take(3)] })],
            Interrupted = true,
        };
        RunWriter.WriteAll(stopped, CaseLabels.None, SampleRuns.Provenance, directory, formats: FigureFormats.Svg);
        // Nothing at all.
        RunWriter.WriteAll(
            sample with { Series = [], Budget = [], GridErrors = [], Densities = [], Walkers = [], Steps = [], Work = [], Interrupted = true },
            CaseLabels.None, SampleRuns.Provenance, directory, formats: FigureFormats.Svg);
    }

    [Theory]
    [InlineData("wrong law", "and its walkers do not follow the law of their own scheme")]
    [InlineData("differs", "more than noise and grid explain")]
    [InlineData("biased by the step", "by the bias of its step")]
    public void Verdict_OfAnEnsembleThatIsOff_GivesTheBudgetsCause(string verdict, string cause)
    {
        var sample = SampleRuns.Line();
        var result = sample with { Budget = [.. sample.Budget.Select(row => row with { Verdict = row.Sampler == "ula" ? verdict : "within noise" })] };
        var finding = RunFindings.Of(result, SampleRuns.Labels).Single(finding => finding.Method == "ula");
        Assert.True(finding.IsOff);
        Assert.Equal(cause, finding.Cause);
        Assert.EndsWith($"Off at 15 of 15 report times after the start: {verdict}.", finding.Sentence, StringComparison.Ordinal);
        Assert.False(RunFindings.Of(result, SampleRuns.Labels).Single(other => other.Method == "proximal-ula").IsOff);
        // Two of fifteen are no more than chance brings.
        var few = sample with { Budget = [.. sample.Budget.Select(row => row with { Verdict = row.Time is > 0.3 and < 0.7 ? verdict : "within grid error" })] };
        Assert.False(RunFindings.Of(few, SampleRuns.Labels).Single(other => other.Method == "ula").IsOff);
    }

    [Fact]
    public void Html_EscapesWhatTheCaseSays()
    {
        var sample = SampleRuns.Line(40, 3);
        var result = sample with { Problem = sample.Problem with { Title = "<b>\"bead\" & co</b></script>" } };
        var html = PageWriter.Html(RunPage.Model(result, new CaseLabels("</script><i>"), SampleRuns.Provenance));
        Assert.DoesNotContain("<b>\"bead\"", html, StringComparison.Ordinal);
        Assert.DoesNotContain("</script><i>", html, StringComparison.Ordinal);
        Assert.Contains("&lt;b&gt;&quot;bead&quot; &amp; co&lt;/b&gt;", html, StringComparison.Ordinal);
        Assert.NotNull(Data(html));
    }

    [Fact]
    public void Html_GivesEveryNumberOfATableItsExactValue()
    {
        var html = Html(1);
        var total = SampleRuns.Line().Budget[5].Total!.Value;
        Assert.Contains(string.Create(CultureInfo.InvariantCulture, $"<data value=\"{total}\">{Numbers.Short(total, 6)}</data>"), html, StringComparison.Ordinal);
    }

    [Fact]
    public void Write_PutsTheFileThere()
    {
        var path = PageWriter.Write(RunPage.Model(SampleRuns.Line(40, 3), CaseLabels.None, SampleRuns.Provenance), directory);
        Assert.Equal(Path.Combine(directory, "report.html"), path);
        Assert.StartsWith("<!doctype html>", File.ReadAllText(path), StringComparison.Ordinal);
    }
}
