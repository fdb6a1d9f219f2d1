using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Reports;

/// <summary>Published bounds beside the measured distances of a run.</summary>
public static class BoundsReport
{
    /// <summary>Rows of <c>bounds.csv</c>: every bound at every report time, beside what was measured; bounds that are not drawn have one row with the reason.</summary>
    public static Table Rows(ComparisonResult result, CaseLabels? labels = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        var rows = new List<IReadOnlyList<Cell>>();
        foreach (var bound in result.Bounds)
        {
            if (bound.NotDrawnBecause is not null)
            {
                rows.Add([bound.Name, bound.Method, Target(bound), Cell.Empty, Cell.Empty, Cell.Empty, bound.NotDrawnBecause]);
                continue;
            }

            foreach (var time in result.Plan.ReportTimes.Where(time => time <= bound.Times[^1]))
                rows.Add([bound.Name, bound.Method, Target(bound), time, bound.At(time), Measured(result, bound, time), Cell.Empty]);
        }

        return new Table("bounds",
            [
                new TableColumn("bound"), new TableColumn("method"), new TableColumn("target", "distance to"), new TableColumn("time", "time", labels?.Time), new TableColumn("bound_w2", "bound", labels?.Length),
                new TableColumn("measured_w2", "measured", labels?.Length), new TableColumn("not_drawn_because", "not drawn because"),
            ], rows);
    }

    /// <summary>The part of a run's page; empty when there are no bounds.</summary>
    public static IEnumerable<PageSection> Sections(ComparisonResult result, CaseLabels labels, FigureStyle style)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(style);
        foreach (var target in new[] { BoundTarget.ExactFlow, BoundTarget.Equilibrium })
        {
            var drawn = result.Bounds.Where(bound => bound.Target == target && bound.NotDrawnBecause is null).ToList();
            if (drawn.Count == 0)
                continue;
            var times = result.Plan.ReportTimes;
            var curves = new List<Curve>();
            foreach (var (method, place) in drawn.Select(bound => bound.Method).Distinct().Select((method, place) => (method, place)))
            {
                var look = style.LookOf(method, place, isSampler: false);
                var measured = times.Select(time => (time, value: Measured(result, drawn.First(bound => bound.Method == method), time))).Where(pair => pair.value > 0).ToList();
                if (measured.Count > 1)
                    curves.Add(new Curve($"{method}, measured", [.. measured.Select(pair => pair.time)], [.. measured.Select(pair => pair.value!.Value)], look with { Width = 2.6, Dash = [] }));
                foreach (var bound in drawn.Where(bound => bound.Method == method))
                    curves.Add(new Curve(bound.Name, [.. times], [.. times.Select(bound.At)], look with { Marker = CurveMarker.None, Width = 1.2 }));
            }

            yield return new ChartSection(
                target == BoundTarget.ExactFlow ? "Published bounds on the distance to the exact flow" : "Published bounds on the distance to equilibrium",
                "A bound can never lie below what it bounds; how far above it lies says how much it gives away on this case.",
                new LinePanel("", CaseLabels.WithUnit("time", labels.Time), CaseLabels.WithUnit("W2", labels.Length)) { Curves = curves, YIsLogarithmic = true });
        }

        if (result.Bounds.Count > 0)
        {
            yield return new TableSection("Bounds: statements, sources, assumptions", "m and L are read from second derivatives sampled over the domain: a picture, not a proof. A bound whose assumption fails on this case is not drawn.",
                new Table("bound_statements",
                    [new TableColumn("bound"), new TableColumn("method"), new TableColumn("statement"), new TableColumn("drawn"), new TableColumn("assumptions", "assumptions on this case"), new TableColumn("source")],
                    [.. result.Bounds.Select(IReadOnlyList<Cell> (bound) => [bound.Name, bound.Method, bound.Statement, bound.NotDrawnBecause is null ? "yes" : "no: " + bound.NotDrawnBecause, bound.Assumptions, bound.Source])]), IsFolded: true);
        }
    }

    private static string Target(BoundCurve bound) => bound.Target == BoundTarget.ExactFlow ? "exact flow" : "equilibrium";

    private static double? Measured(ComparisonResult result, BoundCurve bound, double time)
    {
        var row = result.Series.FirstOrDefault(row => row.Kind == SeriesKind.Flow && row.Method == bound.Method && row.Time == time);
        return bound.Target == BoundTarget.ExactFlow ? row?.DistanceToExact?.Distance : row?.DistanceToEquilibrium?.Distance;
    }
}
