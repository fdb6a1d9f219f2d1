using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Reports;

/// <summary>Table and page of a search for steps.</summary>
public static class SuggestReport
{
    /// <summary>Rows of <c>suggest.csv</c>.</summary>
    public static Table Rows(StepSuggestionResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        return new Table("suggest",
            [
                new TableColumn("method"), new TableColumn("largest_step", "largest step", labels.Time), new TableColumn("stationary_bias_w2", "stationary bias", labels.Length),
                new TableColumn("transient_bias_w2", "largest bias on the way", labels.Length), new TableColumn("stable_step", "stable below", labels.Time),
                new TableColumn("half_step_stationary_bias_w2", "stationary bias at half", labels.Length), new TableColumn("half_step_transient_bias_w2", "on the way at half", labels.Length),
                new TableColumn("double_step_stationary_bias_w2", "stationary bias at double", labels.Length), new TableColumn("double_step_transient_bias_w2", "on the way at double", labels.Length),
                new TableColumn("steps_to_equilibrium", "steps to equilibrium"), new TableColumn("evaluations_to_equilibrium", "gradient evaluations"),
            ],
            [.. result.Rows.Select(IReadOnlyList<Cell> (row) => [
                row.Method, row.Suggested?.Step, row.Suggested?.StationaryBias, row.Suggested?.TransientBias, row.StableStep,
                row.AtHalf?.StationaryBias, row.AtHalf?.TransientBias, row.AtDouble?.StationaryBias, row.AtDouble?.TransientBias,
                (double?)row.StepsToEquilibrium, row.EvaluationsToEquilibrium])],
            "Biases are W2 distances of the law that the method has on the grid.");
    }

    /// <summary>The whole report.</summary>
    public static StudyReport Of(StepSuggestionResult result, CaseLabels labels, RunProvenance provenance, string title, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        var table = Rows(result, labels);
        var (length, time) = (labels.Length is null ? "" : " " + labels.Length, labels.Time is null ? "" : " " + labels.Time);
        var found = result.Rows.Where(row => row.Suggested is not null).OrderByDescending(row => row.Suggested!.Step).ToList();
        var figure = Picture(result, labels, style ?? FigureStyle.Default);
        var sections = new List<PageSection>
        {
            new TableSection("Largest steps", "The rows of suggest.csv. Gradient evaluations are those of one walker, from the case's start until its law is within the aim of equilibrium.", table),
        };
        if (figure is not null)
            sections.Add(new ChartSection(figure.Title, figure.Caption, (LinePanel)figure.Panels[0]));
        var remarks = result.Rows.Where(row => row.Note.Length > 0).Select(row => ($"{row.Method}: {row.Note}", false)).ToList();
        if (result.GridFloor is { } floor && floor > 0.3 * result.Bias)
            remarks.Insert(0, ($"The grid's own error, {Numbers.Short(floor, 3)}{length}, is not small against the bias asked for: take more cells.", false));
        if (result.Interrupted)
            remarks.Insert(0, ("The search was interrupted; the methods that were finished are here.", true));
        sections.AddRange(ClosingSections.Of(provenance, remarks,
            $"Biases were found by following each method's law on a grid of {result.Cells} cells along x; below {(result.GridFloor is { } g ? Numbers.Short(g, 3) + length : "the grid's error")} they mean nothing."));
        var headline = found.Count == 0
            ? $"No step was found whose bias stays under {Numbers.Short(result.Bias)}{length}."
            : $"{found[0].Method} takes the longest step: {Numbers.Short(found[0].Suggested!.Step, 3)}{time} keeps its bias under {Numbers.Short(result.Bias)}{length}.";
        var verdict = new Verdict(result.Interrupted ? VerdictTone.Failed : found.Count == 0 ? VerdictTone.Attention : VerdictTone.Sound, headline,
            [.. found.Select(row => $"{row.Method}: a step of {Numbers.Short(row.Suggested!.Step, 3)}{time}"
                + (row.Suggested.StationaryBias is { } s ? $", bias {Numbers.Short(s, 3)}{length} at equilibrium" : "") + (row.Suggested.TransientBias is { } t ? $" and at most {Numbers.Short(t, 3)}{length} on the way" : "")
                + (row.AtDouble?.Worst is { } d ? $"; at twice the step {Numbers.Short(d, 3)}{length}" : "") + (row.StableStep is { } limit ? $"; unstable from {Numbers.Short(limit, 3)}{time} on" : "") + ".")])
        {
            Word = result.Interrupted ? null : "steps",
        };
        var page = new PageModel("suggest", title, $"What is the largest step whose bias stays under {Numbers.Short(result.Bias)}{length} in W2, at equilibrium and on the way there?", verdict,
            [.. found.Take(5).Select(row => new KeyNumber(row.Method, row.Suggested!.Step, labels.Time, "largest step"))], sections);
        return new StudyReport(page, [table], [table], figure is null ? [] : [figure], provenance, false, result.Interrupted);
    }

    private static Figure? Picture(StepSuggestionResult result, CaseLabels labels, FigureStyle style)
    {
        var curves = new List<Curve>();
        var place = 0;
        foreach (var row in result.Rows)
        {
            var points = new[] { row.AtHalf, row.Suggested, row.AtDouble }.Where(point => point?.Worst > 0).Select(point => point!).ToList();
            if (points.Count >= 2)
                curves.Add(new Curve(row.Method, [.. points.Select(point => point.Step)], [.. points.Select(point => point.Worst!.Value)], style.LookOf(row.Method, place++, isSampler: false)));
        }

        if (curves.Count == 0)
            return null;
        var steps = curves.SelectMany(curve => curve.X).ToList();
        curves.Add(new Curve("bias asked for", [steps.Min(), steps.Max()], [result.Bias, result.Bias], style.Equilibrium));
        return new Figure("steps", "Bias at half, once and twice the suggested step", "The larger of the bias at equilibrium and on the way, log-log.",
            [new LinePanel("", CaseLabels.WithUnit("step", labels.Time), CaseLabels.WithUnit("W2 bias", labels.Length)) { Curves = curves, XIsLogarithmic = true, YIsLogarithmic = true }]);
    }
}
