using System.Globalization;
using System.Text.Json.Nodes;
using FlowSolver.Foundation;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Tables;

namespace FlowSolver.Reporting.Page;

/// <summary>One page that compares several written runs: what differs between their cases, and how far each method was from the exact flow in each.</summary>
public static class GatherPage
{
    /// <summary>Reads the folders of several runs and makes the page's model.</summary>
    /// <exception cref="InputException">There are fewer than two folders, or one cannot be read.</exception>
    public static PageModel Model(IReadOnlyList<string> directories, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(directories);
        return Model([.. directories.Select(GatheredRun.Read)], style);
    }

    /// <summary>Makes the page's model from runs that have been read.</summary>
    /// <exception cref="InputException">There are fewer than two runs.</exception>
    public static PageModel Model(IReadOnlyList<GatheredRun> runs, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(runs);
        if (runs.Count < 2)
            throw new InputException(new InputFault($"{(runs.Count == 0 ? "No folder was" : "Only one folder was")} given.", "Name at least two folders of runs to compare."));
        style ??= FigureStyle.Default;
        runs = WithDistinctNames(runs);
        var labels = CommonLabels(runs, out var unitsDiffer);
        var worst = runs.SelectMany(run => Worst(run)).OrderByDescending(item => item.Row.Distance).ToList();
        var differing = Differing(runs, out var common);
        var sections = new List<PageSection>
        {
            differing.Rows.Count > 0
                ? new TableSection("What differs between the runs", common.Count > 0 ? "Equal in all: " + string.Join(", ", common) + "." : "", differing)
                : new TextSection("What differs between the runs", ["Nothing in the case; the runs may differ in version or machine."]),
            new TableSection("Largest distance from the exact flow", "W2, after the start. Each run is held against the exact flow on its own grid.", Summary(runs, labels)),
        };
        foreach (var method in runs.SelectMany(run => run.Rows.Select(row => row.Method)).Distinct().Where(method => method != "exact"))
        {
            var chart = Chart(runs, style, labels, method, row => row.Distance, "W2 to the exact flow", labels.Length);
            if (chart.Curves.Count > 0)
                sections.Add(new ChartSection(method + ": distance to the exact flow", "One curve a run. Distances of 0 are not drawn.", chart));
        }

        var entropy = Chart(runs, style, labels, "exact", row => row.RelativeEntropy, "relative entropy of the exact flow", null);
        if (entropy.Curves.Count > 0)
            sections.Add(new ChartSection("Way to equilibrium", "Relative entropy of the exact flow to equilibrium, one curve a run.", entropy));
        sections.Add(Remarks(runs, unitsDiffer));
        foreach (var run in runs)
            sections.Add(Provenance(run));
        sections.Add(new TextSection("Limits", RunPage.Limits));
        var names = RunFindings.Listed([.. runs.Select(run => run.Name)]);
        return new PageModel(
            "gather", runs.Count.ToString(CultureInfo.InvariantCulture) + " runs compared",
            $"How do {names} differ, and in which of them do the methods follow the exact flow most closely?",
            Verdict(runs, worst, labels), KeyNumbers(worst, labels), sections);
    }

    private static IReadOnlyList<GatheredRun> WithDistinctNames(IReadOnlyList<GatheredRun> runs)
    {
        var seen = new Dictionary<string, int>();
        return [.. runs.Select(run =>
        {
            var count = seen[run.Name] = seen.GetValueOrDefault(run.Name) + 1;
            return count == 1 ? run : run with { Name = string.Create(CultureInfo.InvariantCulture, $"{run.Name} ({count})") };
        })];
    }

    private static CaseLabels CommonLabels(IReadOnlyList<GatheredRun> runs, out bool differ)
    {
        var all = runs.Select(run => new CaseLabels(run.Text("labels", "length"), run.Text("labels", "energy"), run.Text("labels", "time"))).Distinct().ToList();
        differ = all.Count > 1;
        return differ ? CaseLabels.None : all[0];
    }

    private static IEnumerable<(GatheredRun Run, GatheredRow Row)> Worst(GatheredRun run)
        => run.Rows.Where(row => row.Method != "exact" && row.Time > 0 && row.Distance is not null).GroupBy(row => row.Method)
            .Select(group => (run, group.MaxBy(row => row.Distance)!));

    private static Verdict Verdict(IReadOnlyList<GatheredRun> runs, List<(GatheredRun Run, GatheredRow Row)> worst, CaseLabels labels)
    {
        var reasons = new List<string>();
        foreach (var group in worst.GroupBy(item => item.Row.Method))
        {
            var ordered = group.OrderBy(item => item.Row.Distance).ToList();
            reasons.Add(ordered.Count == 1
                ? $"{group.Key}: only in {ordered[0].Run.Name}, at most {RunFindings.Length(ordered[0].Row.Distance!.Value, labels)}."
                : $"{group.Key}: closest in {ordered[0].Run.Name} (at most {RunFindings.Length(ordered[0].Row.Distance!.Value, labels)}), furthest in {ordered[^1].Run.Name} (at most {RunFindings.Length(ordered[^1].Row.Distance!.Value, labels)}).");
        }

        var unfinished = runs.Where(run => run.Is("failed") || run.Is("interrupted")).Select(run => run.Name).ToList();
        if (unfinished.Count > 0)
            return new Verdict(VerdictTone.Failed, RunFindings.Listed(unfinished) + " did not come to a trusted end. Compare with care.", reasons);
        if (worst.Count == 0)
            return new Verdict(VerdictTone.Sound, "No run holds a distance to the exact flow.", reasons) { Word = "a comparison" };
        var (best, last) = (worst[^1], worst[0]);
        return new Verdict(
            VerdictTone.Sound,
            $"Closest to its exact flow: {best.Row.Method} in {best.Run.Name}, at most {RunFindings.Length(best.Row.Distance!.Value, labels)}. Furthest: {last.Row.Method} in {last.Run.Name}, at most {RunFindings.Length(last.Row.Distance!.Value, labels)}.",
            reasons)
        {
            Word = "a comparison",
        };
    }

    private static IReadOnlyList<KeyNumber> KeyNumbers(List<(GatheredRun Run, GatheredRow Row)> worst, CaseLabels labels)
    {
        if (worst.Count == 0)
            return [];
        var (best, last) = (worst[^1], worst[0]);
        return
        [
            new KeyNumber("closest, at its worst", best.Row.Distance!.Value, labels.Length, best.Row.Method + " in " + best.Run.Name),
            new KeyNumber("furthest, at its worst", last.Row.Distance!.Value, labels.Length, last.Row.Method + " in " + last.Run.Name),
        ];
    }

    private static Table Summary(IReadOnlyList<GatheredRun> runs, CaseLabels labels)
    {
        var methods = runs.SelectMany(run => Worst(run).Select(item => item.Row.Method)).Distinct().ToList();
        return new Table(
            "distances",
            [new("method"), .. runs.Select((run, i) => new TableColumn("run_" + (i + 1).ToString(CultureInfo.InvariantCulture), run.Name, labels.Length))],
            [.. methods.Select(method => (IReadOnlyList<Cell>)[method, .. runs.Select(run => (Cell)Worst(run).Where(item => item.Row.Method == method).Select(item => item.Row.Distance).FirstOrDefault())])]);
    }

    // What a case can differ in: the record's own scalars, the grid, and the resolved case where it is given as values.
    private static Table Differing(IReadOnlyList<GatheredRun> runs, out List<string> common)
    {
        var facts = new List<(string Name, Cell[] Values)>();
        foreach (var name in (string[])["title", "potential", "temperature", "mobility", "step", "walkers", "seed", "dimension"])
            facts.Add((name, [.. runs.Select(run => Scalar(run.Find(name)))]));
        var axes = runs.Max(run => (run.Find("axes") as JsonArray)?.Count ?? 0);
        for (var a = 0; a < axes; a++)
        {
            foreach (var part in (string[])["from", "to", "cells", "ends"])
                facts.Add(($"{(a == 0 ? "x" : "y")} {part}", [.. runs.Select(run => Scalar(Axis(run, a)?[part]))]));
        }

        facts.Add(("until", [.. runs.Select(run => Scalar((run.Find("report_times") as JsonArray)?.LastOrDefault()))]));
        var listed = facts.Select(fact => fact.Name).ToHashSet();
        foreach (var (name, values) in CaseValues(runs))
        {
            if (!listed.Contains(name) && !listed.Contains(name[(name.LastIndexOf('.') + 1)..]))
                facts.Add((name, values));
        }

        common = [.. facts.Where(fact => fact.Values.Distinct().Count() == 1 && !fact.Values[0].IsEmpty).Select(fact => $"{fact.Name} {Shown(fact.Values[0])}")];
        return new Table(
            "differences",
            [new("quantity"), .. runs.Select((run, i) => new TableColumn("run_" + (i + 1).ToString(CultureInfo.InvariantCulture), run.Name))],
            [.. facts.Where(fact => fact.Values.Distinct().Count() > 1).Select(fact => (IReadOnlyList<Cell>)[fact.Name, .. fact.Values])]);

        static JsonObject? Axis(GatheredRun run, int index) => run.Find("axes") is JsonArray array && index < array.Count ? array[index] as JsonObject : null;
    }

    private static IEnumerable<(string Name, Cell[] Values)> CaseValues(IReadOnlyList<GatheredRun> runs)
    {
        var flat = runs.Select(run =>
        {
            var values = new Dictionary<string, Cell>();
            Flatten("", run.Find("case"), values);
            return values;
        }).ToList();
        foreach (var name in flat.SelectMany(values => values.Keys).Distinct())
            yield return (name, [.. flat.Select(values => values.GetValueOrDefault(name))]);
    }

    private static void Flatten(string prefix, JsonNode? node, Dictionary<string, Cell> values)
    {
        switch (node)
        {
            case JsonObject parent:
                foreach (var (name, child) in parent)
                    Flatten(prefix.Length == 0 ? name : prefix + "." + name, child, values);
                break;
            case JsonArray list:
                values[prefix] = list.ToJsonString();
                break;
            case not null:
                values[prefix] = Scalar(node);
                break;
        }
    }

    private static Cell Scalar(JsonNode? node)
    {
        if (node is not JsonValue value)
            return Cell.Empty;
        if (value.TryGetValue<string>(out var text))
            return text;
        if (value.TryGetValue<double>(out var number))
            return number;
        return value.TryGetValue<bool>(out var yes) ? yes ? "yes" : "no" : value.ToJsonString();
    }

    private static string Shown(Cell cell) => cell.Number is { } number ? Numbers.Short(number, 6) : cell.Text ?? "";

    private static LinePanel Chart(
        IReadOnlyList<GatheredRun> runs, FigureStyle style, CaseLabels labels, string method, Func<GatheredRow, double?> value, string title, string? unit)
    {
        var curves = new List<Curve>();
        for (var i = 0; i < runs.Count; i++)
        {
            var rows = runs[i].Rows.Where(row => row.Method == method).ToList();
            if (rows.Any(row => value(row) is > 0))
                curves.Add(new Curve(runs[i].Name, [.. rows.Select(row => row.Time)], [.. rows.Select(row => value(row) ?? double.NaN)], style.Flows[i % style.Flows.Count]));
        }

        return new LinePanel("", CaseLabels.WithUnit("time", labels.Time), CaseLabels.WithUnit(title, unit))
        {
            Curves = curves,
            YIsLogarithmic = true,
            YFrom = method == "exact" ? null : RunFigures.Floor(curves),
        };
    }

    private static RemarksSection Remarks(IReadOnlyList<GatheredRun> runs, bool unitsDiffer)
    {
        var remarks = new List<(string, bool)>();
        if (unitsDiffer)
            remarks.Add(("The runs name different units; numbers are shown without units and must not be compared across runs.", true));
        if (runs.Select(run => run.Number("dimension")).Distinct().Count() > 1)
            remarks.Add(("The runs differ in dimension; their distances belong to different problems.", false));
        foreach (var run in runs)
        {
            if (run.Find("warnings") is not JsonArray warnings)
                continue;
            foreach (var warning in warnings.OfType<JsonObject>())
            {
                if (warning["text"] is JsonValue value && value.TryGetValue<string>(out var text))
                    remarks.Add(($"{run.Name}: {text}", warning["failure"] is JsonValue failure && failure.TryGetValue<bool>(out var failed) && failed));
            }
        }

        return new RemarksSection("Warnings", remarks.Count == 0 ? "None." : "", remarks);
    }

    private static FactsSection Provenance(GatheredRun run)
    {
        var facts = new List<(string, string)>();
        foreach (var name in (string[])["title", "case_name", "started"])
        {
            if (run.Text(name) is { Length: > 0 } text)
                facts.Add((name.Replace('_', ' '), text));
        }

        if (run.Find("versions") is JsonObject versions)
            facts.AddRange(versions.Select(pair => (pair.Key, Shown(Scalar(pair.Value)))));
        foreach (var name in (string[])["seed", "threads", "walkers"])
        {
            if (run.Find(name) is JsonValue value)
                facts.Add((name, value.ToJsonString()));
        }

        return new FactsSection("Where " + run.Name + " comes from", facts, run.Text("case_text"));
    }
}
