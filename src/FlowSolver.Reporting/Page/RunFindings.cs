using System.Globalization;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Page;

/// <summary>What a run says about one method: picked from the records, nothing computed beyond ratios for reading.</summary>
/// <param name="Method">Scheme or sampler.</param>
/// <param name="Kind">Density or ensemble.</param>
/// <param name="Worst">The row with the largest distance to the exact flow after the start; null where there is no distance.</param>
/// <param name="Last">The last row.</param>
/// <param name="Budget">The error budget at the time of <paramref name="Worst"/>; null for flow methods.</param>
/// <param name="Grid">The yardstick's own error at that time.</param>
/// <param name="IsOff">Whether the distance is more than grid and noise explain.</param>
/// <param name="IsFailed">Whether the method failed.</param>
/// <param name="Cause">Why, in a few words.</param>
/// <param name="Sentence">All of it as one or two sentences.</param>
public sealed record MethodFinding(
    string Method, SeriesKind Kind, SeriesRow? Worst, SeriesRow Last, BudgetRow? Budget, double? Grid, bool IsOff, bool IsFailed, string Cause, string Sentence);

/// <summary>Reads a run's records for the verdict: which method is off, by how much, and why.</summary>
public static class RunFindings
{
    // A flow method within this factor of the yardstick's own error is not called off: the estimate of that error is itself an estimate.
    private const double GridFactor = 2;

    // An ensemble is called off when more than this share of its times is; a few of many are to be expected by chance.
    private const double OffShare = 0.2;

    // A number and its unit stay together at the end of a line.
    internal const string Space = "\u00a0";

    /// <summary>One finding a method but the yardstick, the largest distance first; failures before all.</summary>
    public static IReadOnlyList<MethodFinding> Of(ComparisonResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        var findings = new List<MethodFinding>();
        foreach (var group in result.Series.GroupBy(row => row.Method).Where(group => group.Key != "exact"))
        {
            var rows = group.ToList();
            var failure = result.Remarks.FirstOrDefault(remark => remark.IsFailure && remark.Method == group.Key);
            var worst = rows.Where(row => row.Time > 0 && row.DistanceToExact is not null).MaxBy(row => row.DistanceToExact!.Value.Distance);
            var finding = rows[0].Kind == SeriesKind.Flow ? OfFlow(result, labels, rows, worst) : OfSampler(result, labels, rows, worst);
            findings.Add(failure is null ? finding : finding with
            {
                IsFailed = true,
                Sentence = $"{group.Key} failed{(failure.Time is { } time ? " at " + AtTime(time, labels) : "")}: {failure.Text} {finding.Sentence}",
            });
        }

        return [.. findings.OrderByDescending(finding => finding.IsFailed).ThenByDescending(finding => finding.IsOff).ThenByDescending(finding => finding.Worst?.DistanceToExact?.Distance ?? 0)];
    }

    /// <summary>The verdict of a run.</summary>
    public static Verdict Verdict(ComparisonResult result, CaseLabels labels)
    {
        var findings = Of(result, labels);
        var reasons = findings.Select(finding => finding.Sentence).ToList();
        var failed = findings.Where(finding => finding.IsFailed).Select(finding => finding.Method).ToList();
        foreach (var remark in result.Remarks.Where(remark => remark.IsFailure && (remark.Method is null || !failed.Contains(remark.Method))))
            reasons.Insert(0, remark.Text);
        if (result.Interrupted)
            return new Verdict(VerdictTone.Failed, "The run was interrupted. What is shown had been finished before.", reasons);
        if (result.HasFailures)
        {
            return new Verdict(VerdictTone.Failed, failed.Count == 0
                ? "Part of the run could not be trusted."
                : Listed(failed) + " could not be trusted to the end. The rest stands.", reasons);
        }

        var off = findings.Where(finding => finding is { IsOff: true, Worst.DistanceToExact: not null }).ToList();
        var unmeasured = findings.Where(finding => finding.Worst is null || finding.Cause == "not measured").Select(finding => finding.Method).ToList();
        var gap = unmeasured.Count == 0 ? "" : " Not measured: " + Listed(unmeasured) + ".";
        if (findings.Count == 0)
            return new Verdict(VerdictTone.Sound, "The exact flow was computed; there was nothing to compare it with.", reasons);
        if (off.Count == 0)
            return unmeasured.Count == findings.Count ? new Verdict(VerdictTone.Attention, "No distance from the exact flow was measured.", reasons) { Word = "no comparison" } : new Verdict(VerdictTone.Sound, "No method differs from the exact flow by more than grid error and noise explain." + gap, reasons);
        var first = off[0];
        var headline = string.Create(CultureInfo.InvariantCulture,
            $"{first.Method} is furthest off: {Length(first.Worst!.DistanceToExact!.Value.Distance, labels)} from the exact flow at {AtTime(first.Worst.Time, labels)}{Share(result, first.Worst)}, {first.Cause}.");
        var fine = findings.Where(finding => !finding.IsOff && !unmeasured.Contains(finding.Method)).Select(finding => finding.Method).ToList();
        if (fine.Count > 0)
            headline += " " + Listed(fine) + (fine.Count == 1 ? " agrees" : " agree") + " with it to within grid error and noise.";
        else if (off.Count > 1 && off.Count == findings.Count)
            headline += " All " + off.Count.ToString(CultureInfo.InvariantCulture) + " methods are off by more than grid error and noise.";
        return new Verdict(VerdictTone.Attention, headline + gap, reasons);
    }

    /// <summary>The findings as a table.</summary>
    public static Table Summary(ComparisonResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(labels);
        var rows = Of(result, labels).Select(finding => (IReadOnlyList<Cell>)
        [
            finding.Method,
            RunTables.Kind(finding.Kind),
            finding.Worst?.DistanceToExact?.Distance,
            finding.Worst?.Time,
            finding.Last.DistanceToExact?.Distance,
            finding.Kind == SeriesKind.Flow ? finding.Worst?.DistanceToExact?.Distance : finding.Budget?.StepBias,
            finding.Budget?.Noise95,
            finding.Grid,
            finding.IsFailed ? "failed" : finding.IsOff ? "off, " + (finding.Cause.StartsWith("and ", StringComparison.Ordinal) ? finding.Cause[4..] : finding.Cause) : finding.Cause,
        ]).ToList();
        return new Table(
            "findings",
            [
                new("method"), new("kind"), new("w2_exact", "largest W2 to exact", labels.Length), new("time", "at t", labels.Time), new("w2_exact_last", "W2 at the end", labels.Length),
                new("step_bias_w2", "of which step", labels.Length), new("noise_w2_p95", "noise, 95" + Space + "%", labels.Length), new("grid_w2", "grid", labels.Length), new("verdict"),
            ], rows);
    }

    private static MethodFinding OfFlow(ComparisonResult result, CaseLabels labels, List<SeriesRow> rows, SeriesRow? worst)
    {
        var method = rows[0].Method;
        if (worst?.DistanceToExact is not { } distance)
            return new MethodFinding(method, SeriesKind.Flow, null, rows[^1], null, null, false, false, "no distance was computed", $"{method}: no distance to the exact flow was computed.");
        var grid = GridAt(result, worst.Time);
        var isOff = grid is null ? distance.Low > 0 : distance.Low > GridFactor * grid;
        var cause = isOff ? "by its time step" : "within the grid's own error";
        var against = grid is { } error
            ? isOff && error > 0
                ? $", {Numbers.Short(distance.Distance / error, 2)} times the grid error of the exact flow ({Length(error, labels)}): the time step is the cause"
                : $"; the exact flow itself is known to {Length(error, labels)} (grid error), so no difference is shown"
            : "; the exact flow has no error estimate here";
        return new MethodFinding(
            method, SeriesKind.Flow, worst, rows[^1], null, grid, isOff, false, cause,
            $"{method}: at most {Length(distance.Distance, labels)} from the exact flow, at {AtTime(worst.Time, labels)}{against}. At the end: {Length(rows[^1].DistanceToExact?.Distance ?? distance.Distance, labels)}.");
    }

    private static MethodFinding OfSampler(ComparisonResult result, CaseLabels labels, List<SeriesRow> rows, SeriesRow? worst)
    {
        var method = rows[0].Method;
        var budget = result.Budget.Where(row => row.Sampler == method && row.Time > 0 && row.Total is not null && row.NoiseMean is not null).ToList();
        var peak = worst is null ? null : budget.FirstOrDefault(row => row.Time == worst.Time) ?? budget.MaxBy(row => row.Total);
        if (peak is null)
        {
            var known = worst?.DistanceToExact is { } distance
                ? $"{method}: at most {Length(distance.Distance, labels)} from the exact flow, at {AtTime(worst.Time, labels)}; what of it is noise was not measured."
                : $"{method}: its distance from the exact flow was not measured.";
            return new MethodFinding(method, SeriesKind.Ensemble, worst, rows[^1], null, null, false, false, "not measured", known);
        }

        var loud = budget.Where(row => !IsQuiet(row)).ToList();
        var isOff = loud.Count > OffShare * budget.Count;
        var cause = isOff ? CauseOf(loud.GroupBy(row => row.Verdict).MaxBy(group => group.Count())!.Key) : "within noise and grid error";
        var parts = new List<string>();
        if (peak.StepBias is { } step)
            parts.Add($"the bias of its step is {Length(step, labels)}");
        if (peak.Noise95 is { } noise)
            parts.Add($"noise of {result.WalkerCount.ToString(CultureInfo.InvariantCulture)} walkers reaches {Length(noise, labels)} (95{Space}%)");
        if (peak.GridError is { } grid)
            parts.Add($"the grid adds {Length(grid, labels)}");
        return new MethodFinding(
            method, SeriesKind.Ensemble, worst, rows[^1], peak, peak.GridError, isOff, false, cause,
            $"{method}: at most {Length(peak.Total!.Value, labels)} from the exact flow, at {AtTime(peak.Time, labels)}{(parts.Count > 0 ? "; there " + Listed(parts) : "")}. "
            + (loud.Count == 0
                ? $"Within noise and grid error at all {budget.Count} report times after the start."
                : $"Off at {loud.Count} of {budget.Count} report times after the start{(isOff ? "" : ", as many as chance brings")}: {Counted(loud)}."));
    }

    // The verdicts of the budget that do not call a method off.
    private static bool IsQuiet(BudgetRow row)
        => row.Verdict.StartsWith("within", StringComparison.Ordinal) || row.Verdict is "just above noise" or "not measured";

    private static string CauseOf(string verdict) => verdict switch
    {
        "biased by the step" => "by the bias of its step",
        "wrong law" => "and its walkers do not follow the law of their own scheme",
        _ => "more than noise and grid explain",
    };

    private static string Counted(List<BudgetRow> rows)
        => string.Join(", ", rows.GroupBy(row => row.Verdict).OrderByDescending(group => group.Count()).Select(group => group.Key + (rows.All(row => row.Verdict == group.Key) ? "" : " " + group.Count().ToString(CultureInfo.InvariantCulture) + " times")));

    private static double? GridAt(ComparisonResult result, double time)
    {
        for (var i = 0; i < Math.Min(result.GridErrors.Count, result.Plan.ReportTimes.Count); i++)
        {
            if (result.Plan.ReportTimes[i] == time)
                return result.GridErrors[i];
        }

        return null;
    }

    // The distance against the width of the density: a number that means something without knowing the case.
    private static string Share(ComparisonResult result, SeriesRow row)
    {
        var exact = result.Series.FirstOrDefault(other => other.Method == "exact" && other.Time == row.Time);
        if (exact is null || row.DistanceToExact is not { } distance)
            return "";
        var width = Math.Sqrt(exact.Moments.VarianceX + (result.Grid.Dimension == 2 ? exact.Moments.VarianceY : 0));
        return width > 0 ? $" ({Numbers.Short(100 * distance.Distance / width, 2)}{Space}% of the density's standard deviation)" : "";
    }

    // Three digits in prose; tables and readouts carry more.
    internal static string Length(double value, CaseLabels labels) => Readable(value) + (labels.Length is null ? "" : Space + labels.Length);

    internal static string Time(double value, CaseLabels labels) => Numbers.Short(value).Replace('-', '−') + (labels.Time is null ? "" : Space + labels.Time);

    /// <summary>t = so much, in one piece.</summary>
    internal static string AtTime(double value, CaseLabels labels) => "t" + Space + "=" + Space + Time(value, labels);

    // A true minus sign, at which no line breaks.
    private static string Readable(double value) => Numbers.Short(value, 3).Replace('-', '−');

    internal static string Listed(IReadOnlyList<string> names) => names.Count switch
    {
        0 => "",
        1 => names[0],
        _ => string.Join(", ", names.Take(names.Count - 1)) + " and " + names[^1],
    };
}
