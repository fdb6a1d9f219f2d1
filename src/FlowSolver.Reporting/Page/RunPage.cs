using System.Globalization;
using FlowSolver.Problems;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Reports;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Page;

/// <summary>The page of a run.</summary>
public static class RunPage
{
    /// <summary>Limits that every page states.</summary>
    public static IReadOnlyList<string> Limits { get; } =
    [
        "These are numerical approximations of a model: a walker in a fixed potential at a fixed temperature, without inertia. How well the model stands for the real thing is not examined here.",
        "Where escape rates or failure times enter a safety decision, the model must be validated and the codes and licensed practice that apply come first.",
        "Distances are Wasserstein-2 (W2): the root mean square way that probability must be moved to turn one density into the other. The exact flow is exact in time; its grid error is an estimate from half the cells.",
    ];

    /// <summary>Makes the page's model.</summary>
    public static PageModel Model(
        ComparisonResult result, CaseLabels labels, RunProvenance provenance, IReadOnlyList<TransportPicture>? maps = null, FigureStyle? style = null,
        IReadOnlyList<string>? writingProblems = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        var explorer = new RunExplorer(result, labels, maps, style);
        var figures = RunFigures.All(result, labels, maps, style);
        var sections = new List<PageSection>
        {
            new TableSection("Method by method", "Distance of each method from the exact flow where it is largest, and what it is made of.", RunFindings.Summary(result, labels)),
            new ExplorerSection(
                result.Grid.Dimension == 1 ? "Density through time" : "Density maps through time",
                "Move the slider: density, readouts and error budget follow. Switch methods on and off. Point at a chart for values, or focus it and use the arrow keys.",
                explorer),
        };
        Chart("distance");
        Chart("free-energy");
        if (Certificate(result, labels, style ?? FigureStyle.Default) is { } certificate)
            sections.Add(certificate);
        sections.AddRange(BoundsReport.Sections(result, labels, style ?? FigureStyle.Default));
        var remarks = result.Remarks.Select(remark => (Prefixed(remark, labels), remark.IsFailure))
            .Concat(provenance.Warnings.Concat(writingProblems ?? []).Select(text => (text, false))).ToList();
        sections.Add(new RemarksSection("Warnings", remarks.Count == 0 ? "None." : "", remarks));
        if (result.Budget.Count > 0)
            sections.Add(new TableSection("Error budget in full", "The rows of budget.csv.", RunTables.Budget(result, labels), IsFolded: true));
        if (result.Series.Count <= 1500)
            sections.Add(new TableSection("Every method at every report time", "The rows of series.csv.", RunTables.Series(result, labels), IsFolded: true));
        sections.Add(Provenance(result, provenance));
        if (result.Estimators.Count > 0)
            sections.Add(new FactsSection("How estimated quantities were estimated", [.. result.Estimators.Select(pair => (pair.Key, pair.Value))]));
        if (provenance.Sources.Count > 0)
            sections.Add(new TextSection("Sources of the methods", provenance.Sources));
        List<string> limits = [.. Limits];
        if (explorer.ThinningRule is { } rule)
            limits.Add(rule);
        sections.Add(new TextSection("Limits", limits));
        var title = result.Problem.Title.Length > 0 ? result.Problem.Title : provenance.CaseName;
        return new PageModel(provenance.Command, title, Question(result, labels), RunFindings.Verdict(result, labels), KeyNumbers(result, labels), sections);

        void Chart(string name)
        {
            if (figures.FirstOrDefault(figure => figure.Name == name) is { } figure)
                sections.Add(new ChartSection(figure.Title, figure.Caption.Replace(" Left: F − F_eq. Right: the same as relative entropy, (F − F_eq)/T.", "", StringComparison.Ordinal), (LinePanel)figure.Panels[0]));
        }
    }

    private static string Question(ComparisonResult result, CaseLabels labels)
    {
        var problem = result.Problem;
        var flows = result.Series.Where(row => row.Kind == SeriesKind.Flow).Select(row => row.Method).Distinct().ToList();
        var samplers = result.Series.Where(row => row.Kind == SeriesKind.Ensemble).Select(row => row.Method).Distinct().ToList();
        var text = $"How does the density move from t{RunFindings.Space}={RunFindings.Space}0 to {RunFindings.Time(result.Plan.ReportTimes[^1], labels)} in V = {problem.Potential.Description} at T{RunFindings.Space}={RunFindings.Space}{Numbers.Short(problem.Temperature)}{Unit(labels.Energy)}";
        if (problem.Mobility != 1)
            text += $" with mobility {Numbers.Short(problem.Mobility)}";
        text += $", from {Start(problem.Start)}, and how closely do ";
        var others = flows.Where(name => name != "exact").ToList();
        var parts = new List<string>();
        if (others.Count > 0)
            parts.Add(RunFindings.Listed(others));
        if (samplers.Count > 0)
            parts.Add((samplers.Count == 1 ? "an ensemble" : "ensembles") + string.Create(CultureInfo.InvariantCulture, $" of {result.WalkerCount} walkers by ") + RunFindings.Listed(samplers));
        if (parts.Count == 0)
            return text[..text.LastIndexOf(", and how", StringComparison.Ordinal)] + "?";
        return text + string.Join(", and ", parts) + $" follow the exact flow at a step of {RunFindings.Time(result.Plan.Step, labels)}?";
    }

    private static string Unit(string? unit) => unit is null ? "" : RunFindings.Space + unit;

    private static string Start(StartDensity start) => start switch
    {
        GaussianStart => "a " + start.Description,
        FunctionStart => "a density proportional to " + start.Description,
        _ => start.Description,
    };

    private static IReadOnlyList<KeyNumber> KeyNumbers(ComparisonResult result, CaseLabels labels)
    {
        var numbers = new List<KeyNumber>();
        var findings = RunFindings.Of(result, labels);
        if (findings.Where(finding => finding.Worst is not null).MaxBy(finding => finding.Worst!.DistanceToExact!.Value.Distance) is { } worst)
            numbers.Add(new KeyNumber("largest W2 to the exact flow", worst.Worst!.DistanceToExact!.Value.Distance, labels.Length, $"{worst.Method}, {RunFindings.AtTime(worst.Worst.Time, labels)}"));
        if (findings.Where(finding => finding.Worst is not null && !finding.IsFailed).MinBy(finding => finding.Worst!.DistanceToExact!.Value.Distance) is { } best && findings.Count > 1)
            numbers.Add(new KeyNumber("closest method, at its worst", best.Worst!.DistanceToExact!.Value.Distance, labels.Length, $"{best.Method}, {RunFindings.AtTime(best.Worst.Time, labels)}"));
        if (result.GridErrors.Max() is { } grid)
            numbers.Add(new KeyNumber("grid error of the exact flow", grid, labels.Length, "W2, from half the cells"));
        if (result.Budget.Max(row => row.Noise95) is { } noise)
            numbers.Add(new KeyNumber("noise floor", noise, labels.Length, string.Create(CultureInfo.InvariantCulture, $"W2, 95\u00a0% point, {result.WalkerCount} walkers")));
        if (result.Series.LastOrDefault(row => row.Method == "exact") is { RelativeEntropy: { } entropy } last)
            numbers.Add(new KeyNumber("left to equilibrium at the end", entropy, null, $"relative entropy, {RunFindings.AtTime(last.Time, labels)}"));
        if (result.Steps.Where(row => row.DualGap is not null).MaxBy(row => row.DualGap) is { DualGap: { } gap } step)
            numbers.Add(new KeyNumber("largest duality gap of a step", gap, null, string.Create(CultureInfo.InvariantCulture, $"{step.Method}, step {step.Step}")));
        return numbers;
    }

    private static ChartSection? Certificate(ComparisonResult result, CaseLabels labels, FigureStyle style)
    {
        var curves = new List<Curve>();
        var looks = new MethodLooks(result, style);
        foreach (var group in result.Steps.Where(row => row.DualGap is > 0).GroupBy(row => row.Method))
            curves.Add(new Curve(group.Key, [.. group.Select(row => row.Time)], [.. group.Select(row => row.DualGap!.Value)], looks[group.Key]));
        return curves.Count == 0 ? null : new ChartSection(
            "Certificate of each step",
            "Duality gap relative to W2²/(2τ): how far a step can at most be from the true minimiser. The numbers are in steps.csv.",
            new LinePanel("", CaseLabels.WithUnit("time", labels.Time), "relative duality gap") { Curves = curves, YIsLogarithmic = true });
    }

    private static FactsSection Provenance(ComparisonResult result, RunProvenance provenance)
    {
        var facts = new List<(string, string)> { ("case", provenance.CaseName) };
        if (provenance.Started is { } started)
            facts.Add(("started", started.ToString("yyyy-MM-dd HH:mm:ss zzz", CultureInfo.InvariantCulture)));
        facts.AddRange(provenance.Versions.Select(pair => (pair.Key, pair.Value)));
        facts.Add(("grid", result.Grid.Dimension == 1
            ? string.Create(CultureInfo.InvariantCulture, $"{result.Grid.Nx} cells of {Numbers.Short(result.Grid.X.Width)}")
            : string.Create(CultureInfo.InvariantCulture, $"{result.Grid.Nx} × {result.Grid.Ny} cells of {Numbers.Short(result.Grid.X.Width)} × {Numbers.Short(result.Grid.Y!.Width)}")));
        facts.Add(("step", Numbers.Exact(result.Plan.Step)));
        if (result.WalkerCount > 0)
            facts.Add(("walkers", result.WalkerCount.ToString(CultureInfo.InvariantCulture)));
        facts.Add(("seed", result.Seed.ToString(CultureInfo.InvariantCulture)));
        facts.Add(("threads", result.Threads.ToString(CultureInfo.InvariantCulture)));
        facts.AddRange(provenance.Timings.Select(pair => ("time for " + pair.Key, Numbers.Short(pair.Value, 3) + " s")));
        facts.AddRange(result.Work.Select(row => ("work of " + row.Method, string.Create(CultureInfo.InvariantCulture, $"{row.Steps} steps, {row.Iterations} iterations, {Numbers.Short(row.Seconds, 3)} s"))));
        return new FactsSection("Where this comes from", facts, provenance.ResolvedCase);
    }

    private static string Prefixed(Remark remark, CaseLabels labels)
    {
        var place = new List<string>();
        if (remark.Method is not null)
            place.Add(remark.Method);
        if (remark.Time is { } time)
            place.Add(RunFindings.AtTime(time, labels));
        return place.Count == 0 ? remark.Text : string.Join(", ", place) + ": " + remark.Text;
    }
}
