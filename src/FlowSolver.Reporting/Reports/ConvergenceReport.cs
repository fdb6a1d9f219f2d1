using System.Globalization;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Reports;

/// <summary>Tables, figure and page of a convergence study.</summary>
public static class ConvergenceReport
{
    /// <summary>Rows of <c>orders.csv</c>.</summary>
    public static Table Orders(ConvergenceResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        return new Table("orders",
            [
                new TableColumn("method", "method"), new TableColumn("level", "level"), new TableColumn("step", "step", labels.Time), new TableColumn("cells", "cells"),
                new TableColumn("error_w2", "W2 error", labels.Length), new TableColumn("error_l1", "L1 error"), new TableColumn("observed_order", "order"),
                new TableColumn("error_free_energy", "free-energy error", labels.Energy), new TableColumn("at_floor", "at the floor"),
            ],
            [.. result.Rows.Select(IReadOnlyList<Cell> (row) => [
                row.Method, row.Level, row.Step, row.Cells, row.ErrorDistance, row.ErrorVariation, row.ObservedOrder, row.ErrorFreeEnergy, row.AtFloor ? "yes" : "no"])],
            result.Reference);
    }

    /// <summary>One row a method: fitted and promised order.</summary>
    public static Table Fits(ConvergenceResult result)
    {
        ArgumentNullException.ThrowIfNull(result);
        return new Table("fits",
            [new TableColumn("method"), new TableColumn("fitted_order", "fitted order"), new TableColumn("levels_used", "levels used"), new TableColumn("expected_order", "order promised")],
            [.. result.Fits.Select(IReadOnlyList<Cell> (fit) => [fit.Method, fit.FittedOrder, fit.LevelsUsed, (double?)fit.ExpectedOrder])],
            "Slope of log error over the levels above the floor.");
    }

    /// <summary>The whole report.</summary>
    public static StudyReport Of(ConvergenceResult result, CaseLabels labels, RunProvenance provenance, string title, double endTime, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        var figure = Curves(result, labels, style ?? FigureStyle.Default);
        var orders = Orders(result, labels);
        var fits = Fits(result);
        var varied = result.Variable switch { ConvergenceVariable.Step => "step", ConvergenceVariable.Cells => "number of cells", _ => "step and number of cells" };
        var sections = new List<PageSection>
        {
            new TableSection("Orders", "Fitted over the levels above the floor, beside the order that the method promises on smooth problems.", fits),
        };
        if (figure is not null)
            sections.Add(new PictureSection(figure));
        sections.Add(new TableSection("Every method on every level", "The rows of orders.csv. " + result.Reference, orders));
        sections.AddRange(ClosingSections.Of(provenance, result.Remarks.Select(remark => ((remark.Method is null ? "" : remark.Method + ": ") + remark.Text, remark.IsFailure)),
            FloorSentence(result, labels)));
        var page = new PageModel("converge", title,
            $"How fast does the error at t = {Numbers.Short(endTime)}{(labels.Time is null ? "" : " " + labels.Time)} fall when the {varied} is refined? {result.Reference}",
            Judge(result), [.. result.Fits.Where(fit => fit.FittedOrder is not null).Take(6).Select(fit => new KeyNumber(fit.Method, fit.FittedOrder!.Value, Note: fit.ExpectedOrder is { } e ? $"order; {e} promised" : "order"))], sections);
        return new StudyReport(page, [orders, fits], [orders, fits], figure is null ? [] : [figure], provenance, result.Remarks.Any(remark => remark.IsFailure), result.Interrupted);
    }

    private static string FloorSentence(ConvergenceResult result, CaseLabels labels)
        => $"Errors below {Numbers.Short(result.Floor, 3)}{(labels.Length is null ? "" : " " + labels.Length)} in W2 are marked as at the floor and left out of the fits: twice the estimated error of the reference, and no less than rounding.";

    private static Verdict Judge(ConvergenceResult result)
    {
        var reasons = new List<string>();
        var off = 0;
        foreach (var fit in result.Fits)
        {
            if (fit.FittedOrder is not { } order)
            {
                reasons.Add(fit.ExpectedOrder is null
                    ? $"{fit.Method}: has no stepping error; it is the reference."
                    : $"{fit.Method}: fewer than two levels lie above the floor, so no order can be read off. Take longer steps, fewer levels or more cells.");
                continue;
            }

            var text = string.Create(CultureInfo.InvariantCulture, $"{fit.Method}: order {order:f2} over {fit.LevelsUsed} levels");
            if (fit.ExpectedOrder is { } expected && order < expected - 0.25)
            {
                off++;
                text += $", below the {expected} that it promises on smooth problems";
            }

            reasons.Add(text + ".");
        }

        var failed = result.Remarks.Any(remark => remark.IsFailure);
        var headline = failed ? "Not every level could be computed."
            : off > 0 ? $"{off} of {result.Fits.Count} methods fall short of their promised order on this case."
            : "Every method whose order can be read off converges as promised, or faster.";
        return new Verdict(failed ? VerdictTone.Failed : off > 0 ? VerdictTone.Attention : VerdictTone.Sound, headline, reasons);
    }

    private static Figure? Curves(ConvergenceResult result, CaseLabels labels, FigureStyle style)
    {
        var byCells = result.Variable == ConvergenceVariable.Cells;
        var curves = new List<Curve>();
        var notes = new List<PointNote>();
        var place = 0;
        var triangles = new HashSet<int>();
        var all = result.Rows.Where(row => row.ErrorDistance > 0 && !(row.Method == "exact" && !byCells && result.Variable == ConvergenceVariable.Step)).ToList();
        if (all.Count == 0)
            return null;
        foreach (var fit in result.Fits)
        {
            var rows = all.Where(row => row.Method == fit.Method).ToList();
            var look = style.LookOf(fit.Method, fit.Method == "exact" ? 0 : place++, isSampler: false);
            if (rows.Count == 0)
                continue;
            curves.Add(new Curve(fit.Method, [.. rows.Select(Size)], [.. rows.Select(row => row.ErrorDistance!.Value)], look));
            // One triangle for each order, under the finest two levels that count of the first method that has it.
            var used = rows.Where(row => !row.AtFloor).ToList();
            if (used.Count >= 2 && fit.ExpectedOrder is { } order && triangles.Add(order))
                AddTriangle(used[^2], used[^1], order, curves, notes, style, Size);
        }

        var sizes = all.Select(Size).Distinct().Order().ToArray();
        curves.Add(new Curve("floor", [sizes[0], sizes[^1]], [result.Floor, result.Floor], style.Equilibrium));
        var xTitle = byCells ? "cells along x" : CaseLabels.WithUnit("step", labels.Time);
        return new Figure("convergence", "Error against " + (byCells ? "cells" : "step"),
            "Log-log; triangles show the slope of the order written beside them. Below the floor an error says nothing about the order.",
            [new LinePanel("", xTitle, CaseLabels.WithUnit("W2 error", labels.Length)) { Curves = curves, Notes = notes, XIsLogarithmic = true, YIsLogarithmic = true }]);

        double Size(ConvergenceRow row) => byCells ? row.Cells : row.Step;
    }

    private static void AddTriangle(
        ConvergenceRow coarse, ConvergenceRow fine, int order, List<Curve> curves, List<PointNote> notes, FigureStyle style, Func<ConvergenceRow, double> size)
    {
        var (x0, x1) = (size(coarse), size(fine));
        var y1 = fine.ErrorDistance!.Value * 0.45;
        var y0 = y1 * Math.Pow(2, order);
        // Vertices: fine end, coarse end, and the corner below the coarse end.
        curves.Add(new Curve(null, [x1, x0, x0, x1], [y1, y0, y1, y1], style.Equilibrium with { Dash = [], Width = 1 }));
        notes.Add(new PointNote(x0, Math.Sqrt(y0 * y1), order.ToString(CultureInfo.InvariantCulture)));
    }
}
