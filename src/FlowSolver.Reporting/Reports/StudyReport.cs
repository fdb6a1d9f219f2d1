using System.Text.Json.Nodes;
using FlowSolver.Reporting.Archives;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Tables;

namespace FlowSolver.Reporting.Reports;

/// <summary>Everything that a study leaves, as data.</summary>
/// <param name="Page">The page.</param>
/// <param name="Tables">Tables written as CSV.</param>
/// <param name="PasteTables">Tables written as Markdown and LaTeX too, ready to paste.</param>
/// <param name="Figures">Figures written as SVG, PNG and PDF.</param>
/// <param name="Provenance">Where it came from.</param>
/// <param name="Failed">Whether something could not be trusted.</param>
/// <param name="Interrupted">Whether it was stopped before its end.</param>
public sealed record StudyReport(
    PageModel Page, IReadOnlyList<Table> Tables, IReadOnlyList<Table> PasteTables, IReadOnlyList<Figure> Figures, RunProvenance Provenance,
    bool Failed = false, bool Interrupted = false);

/// <summary>Writes a study's report.</summary>
public static class StudyWriter
{
    /// <summary>Writes all files into a folder, which must exist; the caller renames it into place.</summary>
    public static WrittenRun Write(StudyReport report, string directory)
    {
        ArgumentNullException.ThrowIfNull(report);
        ArgumentNullException.ThrowIfNull(directory);
        var files = new List<string>();
        var problems = new List<string>();
        foreach (var table in report.Tables)
            files.Add(TableWriter.WriteCsv(table, directory));
        foreach (var table in report.PasteTables)
        {
            files.Add(Text(Path.Combine(directory, table.Name + ".md"), TableWriter.Markdown(table)));
            files.Add(Text(Path.Combine(directory, table.Name + ".tex"), TableWriter.Latex(table)));
        }

        if (report.Figures.Count > 0)
        {
            var pictures = Directory.CreateDirectory(Path.Combine(directory, "figures")).FullName;
            using var writer = new FigureWriter();
            foreach (var figure in report.Figures)
                files.AddRange(writer.Write(figure, pictures));
            if (writer.Problem is not null)
                problems.Add(writer.Problem);
        }

        files.Add(PageWriter.Write(report.Page, directory));
        files.Add(Text(Path.Combine(directory, "run.json"), Record(report, problems).ToJsonString(RunRecord.Options) + "\n"));
        return new WrittenRun(files, problems);
    }

    private static JsonObject Record(StudyReport report, List<string> problems) => new()
    {
        ["command"] = report.Provenance.Command,
        ["status"] = report.Interrupted ? "interrupted" : report.Failed ? "not trusted" : "complete",
        ["case"] = report.Provenance.ResolvedValues?.DeepClone() ?? report.Provenance.ResolvedCase,
        ["finding"] = report.Page.Verdict.Headline,
        ["versions"] = Strings(report.Provenance.Versions),
        ["seconds"] = new JsonObject(report.Provenance.Timings.Select(pair => KeyValuePair.Create(pair.Key, (JsonNode?)JsonValue.Create(pair.Value)))),
        ["warnings"] = new JsonArray([.. report.Provenance.Warnings.Concat(problems).Select(text => (JsonNode?)JsonValue.Create(text))]),
        ["sources"] = new JsonArray([.. report.Provenance.Sources.Select(text => (JsonNode?)JsonValue.Create(text))]),
    };

    private static JsonObject Strings(IReadOnlyDictionary<string, string> values)
        => new(values.Select(pair => KeyValuePair.Create(pair.Key, (JsonNode?)JsonValue.Create(pair.Value))));

    private static string Text(string path, string text)
    {
        File.WriteAllText(path, text);
        return path;
    }
}

/// <summary>Sections that every study's page ends with.</summary>
public static class ClosingSections
{
    /// <summary>Warnings, provenance, sources and limits.</summary>
    public static IEnumerable<PageSection> Of(RunProvenance provenance, IEnumerable<(string Text, bool IsFailure)> remarks, params IReadOnlyList<string> limits)
    {
        ArgumentNullException.ThrowIfNull(provenance);
        ArgumentNullException.ThrowIfNull(limits);
        var all = remarks.Concat(provenance.Warnings.Select(text => (text, false))).ToList();
        yield return new RemarksSection("Warnings", all.Count == 0 ? "None." : "", all);
        yield return new FactsSection("Provenance", [("command", provenance.Command), .. provenance.Versions.Select(pair => (pair.Key, pair.Value))], provenance.ResolvedCase);
        if (provenance.Sources.Count > 0)
            yield return new TextSection("Sources of the methods", provenance.Sources);
        yield return new TextSection("Limits", [.. RunPage.Limits, .. limits]);
    }
}
