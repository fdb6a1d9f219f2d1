using System.Globalization;
using FlowSolver.Grids;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Reports;

/// <summary>Tables, figures and page of a relaxation study.</summary>
public static class RelaxReport
{
    /// <summary>Rows of <c>modes.csv</c>.</summary>
    public static Table Modes(RelaxationResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        var perTime = labels.Time is null ? null : $"1/{labels.Time}";
        return new Table("modes",
            [new TableColumn("mode"), new TableColumn("rate", "rate", perTime), new TableColumn("timescale", "timescale", labels.Time), new TableColumn("grid_error", "grid error", perTime), new TableColumn("start_share", "share of the start")],
            [.. result.Modes.Select(IReadOnlyList<Cell> (row) => [row.Mode, row.Rate, row.Timescale, row.GridError, row.StartShare])]);
    }

    /// <summary>Rows of <c>wells.csv</c>: bottoms of wells and passes.</summary>
    public static Table Wells(RelaxationResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        var plane = result.Problem.Grid.Dimension == 2;
        List<TableColumn> columns = [new("kind"), new("number"), new("x", "x", labels.Length)];
        if (plane)
            columns.Add(new TableColumn("y", "y", labels.Length));
        columns.Add(new TableColumn("potential", "V", labels.Energy));
        columns.Add(new TableColumn("least_curvature", "least curvature"));
        columns.Add(new TableColumn("largest_curvature", "largest curvature"));
        return new Table("wells", columns,
            [
                .. result.Kramers.Wells.Select((point, i) => Line("well", i, point)),
                .. result.Kramers.Passes.Select((point, i) => Line("pass", i, point)),
            ]);

        IReadOnlyList<Cell> Line(string kind, int number, CriticalPoint point)
        {
            List<Cell> cells = [kind, number + 1, point.X];
            if (plane)
                cells.Add(point.Y);
            cells.Add(point.Potential);
            cells.Add((double?)(double.IsFinite(point.LowCurvature) ? point.LowCurvature : null));
            cells.Add((double?)(double.IsFinite(point.HighCurvature) ? point.HighCurvature : null));
            return cells;
        }
    }

    /// <summary>Rows of <c>passages.csv</c>.</summary>
    public static Table Passages(RelaxationResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        return new Table("passages",
            [new TableColumn("from", "from well"), new TableColumn("to", "to well"), new TableColumn("mean_first_passage_time", "mean first passage time", labels.Time), new TableColumn("kramers_time", "1/Kramers rate", labels.Time)],
            [.. result.Passages.Select(IReadOnlyList<Cell> (row) => [row.From + 1, row.To + 1, row.Time, row.KramersTime])]);
    }

    /// <summary>Rows of <c>decay.csv</c>.</summary>
    public static Table Decay(RelaxationResult result, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        return new Table("decay",
            [new TableColumn("time", "time", labels.Time), new TableColumn("measured"), new TableColumn("predicted"), new TableColumn("measured_rate", "measured rate"), new TableColumn("predicted_rate", "predicted rate")],
            [.. result.Decay.Select(IReadOnlyList<Cell> (row) => [row.Time, row.Measured, row.Predicted, row.MeasuredRate, row.PredictedRate])]);
    }

    /// <summary>The whole report.</summary>
    public static StudyReport Of(RelaxationResult result, CaseLabels labels, RunProvenance provenance, string title, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        var look = style ?? FigureStyle.Default;
        var (modes, wells, passages, decay) = (Modes(result, labels), Wells(result, labels), Passages(result, labels), Decay(result, labels));
        var figures = Pictures(result, labels, look);
        var sections = new List<PageSection>();
        foreach (var figure in figures)
        {
            if (figure.Panels is [LinePanel panel])
                sections.Add(new ChartSection(figure.Title, figure.Caption, panel));
            else
                sections.Add(new PictureSection(figure));
        }

        sections.Add(new TableSection("Modes", "The rows of modes.csv: each part of the start's memory decays at its mode's rate. Grid error is estimated from half the cells.", modes));
        if (wells.Rows.Count > 0)
            sections.Add(new TableSection("Wells and passes", "Found in the landscape, deepest well first.", wells));
        if (passages.Rows.Count > 0)
            sections.Add(new TableSection("From well to well", "Mean first passage times by a linear solve, beside the reciprocal rate by the formula of Kramers and Eyring, which holds for barriers that are high against T.", passages));
        if (result.Diffusion is { } tensor)
            sections.Add(new FactsSection("Effective diffusion over many turns", [.. Facts(tensor)]));
        if (decay.Rows.Count > 0)
            sections.Add(new TableSection("Decay in full", "The rows of decay.csv.", decay, IsFolded: true));
        sections.AddRange(ClosingSections.Of(provenance, result.Remarks.Select(remark => (remark.Text, remark.IsFailure)),
            "Escape times are those of the model's walker without inertia. The formula of Kramers and Eyring is an asymptotic estimate."));
        var time = labels.Time is null ? "" : " " + labels.Time;
        var gap = result.Modes[1];
        var reasons = new List<string>
        {
            $"The slowest mode decays at rate {Numbers.Short(gap.Rate)}{(labels.Time is null ? "" : $" per {labels.Time}")}" + (gap.GridError is { } error ? $" (grid error about {Numbers.Short(Math.Abs(error), 2)})." : "."),
        };
        if (result.Kramers.SlowRates.Count > 0)
            reasons.Add($"The formula of Kramers and Eyring gives {Numbers.Short(result.Kramers.SlowRates[0])} for it: a ratio of {Numbers.Short(gap.Rate / result.Kramers.SlowRates[0], 3)}.");
        foreach (var row in result.Passages.Take(2))
            reasons.Add($"From the bottom of well {row.From + 1} to that of well {row.To + 1} a walker takes {Numbers.Short(row.Time)}{time} on average.");
        if (result.Modes.Count > 2)
            reasons.Add($"The next mode is {Numbers.Short(result.Modes[2].Rate / gap.Rate, 3)} times as fast.");
        var failed = result.Remarks.Any(remark => remark.IsFailure);
        var page = new PageModel("relax", title, "How fast does the density relax to equilibrium, in which shapes, and how long does a walker stay in a well?",
            new Verdict(failed ? VerdictTone.Failed : VerdictTone.Sound, $"The last memory of the start fades with a timescale of {Numbers.Short(1 / gap.Rate)}{time}.", reasons) { Word = "rates and times" },
            [new KeyNumber("spectral gap", gap.Rate, labels.Time is null ? null : $"1/{labels.Time}"), new KeyNumber("slowest timescale", 1 / gap.Rate, labels.Time), .. result.Passages.Take(2).Select(row => new KeyNumber($"well {row.From + 1} to well {row.To + 1}", row.Time, labels.Time, "mean first passage time"))],
            sections);
        return new StudyReport(page, [.. new[] { modes, wells, passages, decay, Shapes(result, labels) }.Where(table => table.Rows.Count > 0)], [modes], figures, provenance, failed);
    }

    private static IEnumerable<(string, string)> Facts(DiffusionTensor tensor)
    {
        if (tensor.XX is { } xx)
            yield return ("along x", Numbers.Short(xx, 8));
        if (tensor.YY is { } yy)
            yield return ("along y", Numbers.Short(yy, 8));
        if (tensor.XY is { } xy)
            yield return ("between x and y", Numbers.Short(xy, 8));
    }

    // Mode shapes as they add to the density, π·u: finite everywhere, and of mass 0.
    private static Table Shapes(RelaxationResult result, CaseLabels labels)
    {
        var grid = result.Problem.Grid;
        List<TableColumn> columns = [new("x", "x", labels.Length)];
        if (grid.Dimension == 2)
            columns.Add(new TableColumn("y", "y", labels.Length));
        columns.AddRange(result.Modes.Skip(1).Select(mode => new TableColumn("mode_" + mode.Mode.ToString(CultureInfo.InvariantCulture))));
        var rows = new List<IReadOnlyList<Cell>>();
        // In the plane every fourth cell along each axis: the picture does not need more, and the file stays small.
        var stride = grid.Dimension == 2 ? 4 : 1;
        for (var row = 0; row < grid.Ny; row += stride)
        {
            for (var i = 0; i < grid.Nx; i += stride)
            {
                var cell = row * grid.Nx + i;
                List<Cell> cells = [grid.X.Center(i)];
                if (grid.Y is not null)
                    cells.Add(grid.Y.Center(row));
                cells.AddRange(Enumerable.Range(1, result.Modes.Count - 1).Select(mode => (Cell)(double?)Shape(result, mode, cell)));
                rows.Add(cells);
            }
        }

        return new Table("shapes", columns, rows, "densities of the modes, π·u");
    }

    private static double Shape(RelaxationResult result, int mode, int cell)
    {
        var pi = result.Problem.Equilibrium.Values[cell];
        var value = pi > 0 ? pi * result.Shapes[mode][cell] : 0;
        return double.IsFinite(value) ? value : 0;
    }

    private static List<Figure> Pictures(RelaxationResult result, CaseLabels labels, FigureStyle style)
    {
        var figures = new List<Figure>();
        var grid = result.Problem.Grid;
        if (grid.Y is null)
        {
            var x = grid.X.Centers();
            figures.Add(new Figure("modes", "Shapes of the slowest modes", "What each mode adds to the density, π·u; each decays at its own rate without changing its shape.",
                [new LinePanel("", CaseLabels.WithUnit("x", labels.Length), "mode density")
                {
                    Curves =
                    [
                        new Curve("equilibrium", x, result.Problem.Equilibrium.Values, style.Equilibrium),
                        .. Enumerable.Range(1, Math.Min(3, result.Modes.Count - 1)).Select(mode => new Curve(
                            $"mode {mode}, rate {Numbers.Short(result.Modes[mode].Rate, 3)}", x, [.. Enumerable.Range(0, grid.Nx).Select(cell => Shape(result, mode, cell))], style.Flows[mode - 1] with { Marker = CurveMarker.None })),
                    ],
                }]));
            if (result.Committor is { } committor)
            {
                figures.Add(new Figure("committor", "Which well comes next", "Probability of reaching the second deepest well before the deepest, by where a walker starts.",
                    [new LinePanel("", CaseLabels.WithUnit("x", labels.Length), "committor") { Curves = [new Curve(null, x, committor, style.Exact)], YFrom = 0, YTo = 1 }]));
            }
        }
        else if (result.Committor is { } committor)
        {
            // Drawn as a map of values from 0 to 1.
            figures.Add(new Figure("committor", "Which well comes next", "Probability of reaching the second deepest well before the deepest, from 0 (pale) to 1 (dark), by where a walker starts; lines are those of V.",
                [new MapPanel("", CaseLabels.WithUnit("x", labels.Length), CaseLabels.WithUnit("y", labels.Length), new Density(grid, [.. committor.Select(value => Math.Clamp(value, 0, 1))]), 1)
                {
                    Levels = result.Problem.CellPotential,
                    LevelValues = [.. style.LevelsInTemperature.Select(level => result.Problem.LeastPotential + level * result.Problem.Problem.Temperature)],
                }]));
        }

        var decay = result.Decay.Where(row => row.Measured > 0 && row.Predicted > 0).ToList();
        if (decay.Count > 1)
        {
            var times = decay.Select(row => row.Time).ToArray();
            figures.Add(new Figure("decay", "Decay: measured and predicted", "√∫(ρ − π)²/π along the exact flow, beside what the modes found say; they meet once the faster modes have died out.",
                [new LinePanel("", CaseLabels.WithUnit("time", labels.Time), "distance from equilibrium")
                {
                    Curves = [new Curve("measured", times, [.. decay.Select(row => row.Measured)], style.Exact), new Curve("predicted from the modes", times, [.. decay.Select(row => row.Predicted)], style.Flows[1] with { Marker = CurveMarker.None })],
                    YIsLogarithmic = true,
                }]));
        }

        return figures;
    }
}
