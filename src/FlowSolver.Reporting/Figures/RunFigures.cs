using System.Globalization;
using FlowSolver.Grids;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Figures;

/// <summary>The figures of a run, as data.</summary>
public static class RunFigures
{
    /// <summary>
    /// All figures that the records allow: in one dimension <c>densities</c>, in two <c>density-maps</c>, <c>walkers</c> and one
    /// <c>transport-map</c> for each map handed over; in both <c>free-energy</c>, <c>distance</c> and <c>error-budget</c>.
    /// </summary>
    public static IReadOnlyList<Figure> All(
        ComparisonResult result, CaseLabels labels, IReadOnlyList<TransportPicture>? maps = null, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        style ??= FigureStyle.Default;
        var looks = new MethodLooks(result, style);
        var figures = new List<Figure?>();
        if (result.Grid.Dimension == 1)
        {
            figures.Add(Densities(result, labels, style, looks));
        }
        else
        {
            figures.Add(DensityMaps(result, labels, style));
            figures.Add(Walkers(result, labels, style));
            for (var i = 0; i < (maps?.Count ?? 0); i++)
                figures.Add(Transport(result, labels, style, maps![i], maps.Count == 1 ? "transport-map" : "transport-map-" + (i + 1).ToString(CultureInfo.InvariantCulture)));
        }

        figures.Add(FreeEnergy(result, labels, looks));
        figures.Add(Distance(result, labels, style, looks));
        figures.Add(Budget(result, labels, style));
        return [.. figures.OfType<Figure>()];
    }

    /// <summary>Evenly chosen report indices that include the first and the last, at most <paramref name="most"/> of them; denser at the start, where densities change fastest.</summary>
    internal static IReadOnlyList<int> ChosenReports(int reached, int most)
    {
        if (reached <= most)
            return [.. Enumerable.Range(0, reached)];
        var chosen = new SortedSet<int> { 0, reached - 1 };
        for (var k = 1; k < most - 1; k++)
        {
            var index = (int)Math.Round((reached - 1) * Math.Pow((double)k / (most - 1), 1.6));
            while (!chosen.Add(Math.Clamp(index, 0, reached - 1)) && index < reached - 1)
                index++;
        }

        return [.. chosen];
    }

    private static Figure? Densities(ComparisonResult result, CaseLabels labels, FigureStyle style, MethodLooks looks)
    {
        var reached = Tables.RunTables.ReachedReports(result);
        if (reached == 0)
            return null;
        var x = result.Grid.X.Centers();
        var reports = ChosenReports(reached, 6);
        var (from, to) = ShownRange(result, reports);
        var panels = reports.Select(report =>
        {
            var curves = new List<Curve> { new("equilibrium", x, result.Equilibrium.Values, style.Equilibrium) };
            curves.AddRange(result.Densities.Where(history => report < history.Densities.Count)
                .Select(history => new Curve(history.Method, x, history.Densities[report].Values, looks[history.Method] with { Marker = CurveMarker.None, Width = history.Method == "exact" ? 2.4 : 1.8 })));
            return (Panel)new LinePanel(TimeTitle(result.Plan.ReportTimes[report], labels), CaseLabels.WithUnit("x", labels.Length), CaseLabels.WithUnit("density", labels.Density(1)))
            {
                Curves = curves,
                Rugs = [.. result.Walkers.Where(walkers => report < walkers.X.Count)
                    .Select(walkers => new Curve(walkers.Sampler + " walkers", [.. walkers.X[report].Take(100)], [], looks[walkers.Sampler]))],
                XFrom = from,
                XTo = to,
            };
        }).ToList();
        // One scale for all panels, set by what comes after the start: a narrow start would press the rest flat.
        var greatest = reports.Skip(reports.Count > 2 ? 1 : 0)
            .SelectMany(report => result.Densities.Where(history => report < history.Densities.Count).Select(history => history.Densities[report].Values.Max()))
            .Append(result.Equilibrium.Values.Max()).Max();
        var first = result.Densities.Where(history => history.Densities.Count > 0).Select(history => history.Densities[0].Values.Max()).DefaultIfEmpty(0).Max();
        var clipped = first > 1.06 * greatest;
        panels = [.. panels.Select(panel => (Panel)((LinePanel)panel with { YFrom = 0, YTo = 1.06 * greatest }))];
        if (clipped)
        {
            panels[0] = (LinePanel)panels[0] with
            {
                Title = TimeTitle(result.Plan.ReportTimes[reports[0]], labels) + "  (peak " + Shown(first) + ", cut off)",
            };
        }

        return new Figure(
            "densities", "Density at chosen times",
            "Curves that lie on one another agree. All panels share one scale." + (result.Walkers.Count > 0 ? " Strokes at the foot are walkers." : ""),
            panels, Math.Min(3, panels.Count));
    }

    private static Figure? FreeEnergy(ComparisonResult result, CaseLabels labels, MethodLooks looks)
    {
        var temperature = result.Problem.Temperature;
        var curves = new List<Curve>();
        foreach (var (method, rows) in RowsByMethod(result))
        {
            if (rows.All(row => row.RelativeEntropy is null && row.FreeEnergy is null))
                continue;
            // F − F_eq = T·KL; the relative entropy keeps its digits near equilibrium, where the difference would cancel.
            curves.Add(new Curve(
                method, [.. rows.Select(row => row.Time)],
                [.. rows.Select(row => row.RelativeEntropy * temperature ?? row.FreeEnergy - result.EquilibriumFreeEnergy ?? double.NaN)], looks[method]));
        }

        return curves.Count == 0 ? null : new Figure(
            "free-energy", "Free energy above equilibrium",
            "F falls at every step of a sound method. Left: F − F_eq. Right: the same as relative entropy, (F − F_eq)/T.",
            [
                new LinePanel("", CaseLabels.WithUnit("time", labels.Time), CaseLabels.WithUnit("F − F_eq", labels.Energy))
                {
                    Curves = curves, YIsLogarithmic = true, RightTitle = "relative entropy KL(ρ|π)", RightScale = 1 / temperature,
                },
            ]);
    }

    private static Figure? Distance(ComparisonResult result, CaseLabels labels, FigureStyle style, MethodLooks looks)
    {
        var curves = new List<Curve>();
        foreach (var (method, rows) in RowsByMethod(result))
        {
            if (method == "exact" || rows.All(row => row.DistanceToExact is null or { Distance: 0 }))
                continue;
            curves.Add(new Curve(method, [.. rows.Select(row => row.Time)], [.. rows.Select(row => row.DistanceToExact?.Distance ?? double.NaN)], looks[method]));
        }

        if (curves.Count == 0)
            return null;
        var floor = Floor(curves);
        var gridNote = AddGridError(result, labels, style, curves, ref floor);
        var times = result.Budget.Where(row => row.Noise95 is not null).Select(row => row.Time).Distinct().ToArray();
        var bands = new List<Band>();
        if (times.Length > 1)
        {
            bands.Add(new Band(
                NoiseLabel(result), times, null, [.. times.Select(time => result.Budget.Where(row => row.Time == time).Max(row => row.Noise95 ?? double.NaN))]));
        }

        return new Figure(
            "distance", "Distance to the exact flow",
            (bands.Count > 0 ? "An ensemble inside the band cannot be told from one of the exact law. " : "")
            + "A flow method below the grid error is as good as the yardstick itself. Distances of 0 are not drawn." + gridNote,
            [
                new LinePanel("", CaseLabels.WithUnit("time", labels.Time), CaseLabels.WithUnit("W2 to the exact flow", labels.Length))
                {
                    Curves = curves, Bands = bands, YIsLogarithmic = true, YFrom = floor,
                },
            ]);
    }

    private static Figure? Budget(ComparisonResult result, CaseLabels labels, FigureStyle style)
    {
        var samplers = result.Budget.Select(row => row.Sampler).Distinct().ToList();
        if (samplers.Count == 0)
            return null;
        var panels = new List<Panel>();
        if (result.Budget.All(row => row.Total is null && row.StepBias is null && row.NoiseMean is null))
            return null;
        var (_, high) = PanelPainter.Range(
            result.Budget.SelectMany(row => (double?[])[row.Total, row.StepBias, row.NoiseMean, row.Noise95]).Select(value => value ?? double.NaN), true);
        foreach (var sampler in samplers)
        {
            var rows = result.Budget.Where(row => row.Sampler == sampler).ToList();
            double[] times = [.. rows.Select(row => row.Time)];
            var curves = new List<Curve>();
            Add("total", row => row.Total, style.Exact with { Marker = CurveMarker.Circle });
            Add("step bias", row => row.StepBias, style.Flows[1 % style.Flows.Count]);
            Add("noise, mean", row => row.NoiseMean, new CurveLook(style.Muted, style.Muted, 1.4, [5, 2]));
            Add("grid", row => row.GridError, style.Equilibrium);
            var bands = rows.Any(row => row.Noise95 is not null)
                ? (Band[])[new Band("noise, up to its 95 % point", times, null, [.. rows.Select(row => row.Noise95 ?? double.NaN)])]
                : [];
            panels.Add(new LinePanel(sampler, CaseLabels.WithUnit("time", labels.Time), CaseLabels.WithUnit("W2", labels.Length))
            {
                Curves = curves,
                Bands = bands,
                YIsLogarithmic = true,
                YTo = high,
            });

            void Add(string label, Func<BudgetRow, double?> value, CurveLook look)
            {
                if (rows.Any(row => value(row) is not null))
                    curves.Add(new Curve(label, times, [.. rows.Select(row => value(row) ?? double.NaN)], look));
            }
        }

        var gridNote = "";
        if (Floor(panels.SelectMany(panel => ((LinePanel)panel).Curves).Where(curve => curve.Label != "grid")) is { } floor)
        {
            var grids = panels.SelectMany(panel => ((LinePanel)panel).Curves).Where(curve => curve.Label == "grid").SelectMany(curve => curve.Y.Skip(1)).Where(error => error > 0).ToList();
            if (grids.Count > 0 && grids.Max() < floor / GridReach)
            {
                gridNote = $" The grid's part lies below the scale: at most {Shown(grids.Max())}{(labels.Length is null ? "" : " " + labels.Length)}.";
                panels = [.. panels.Select(panel => (Panel)((LinePanel)panel with { Curves = [.. ((LinePanel)panel).Curves.Where(curve => curve.Label != "grid")] }))];
            }
            else if (grids.Count > 0)
            {
                floor = Math.Min(floor, Math.Max(grids.Min(), floor / GridReach) / 1.6);
            }

            panels = [.. panels.Select(panel => (Panel)((LinePanel)panel with { YFrom = floor }))];
        }

        return new Figure(
            "error-budget", "What the error of each ensemble is made of",
            "Where the total follows the step bias, a smaller step helps; where it lies in the noise band, only more walkers would show more." + gridNote,
            panels, Math.Min(2, panels.Count));
    }

    private static Figure? DensityMaps(ComparisonResult result, CaseLabels labels, FigureStyle style)
    {
        var reached = Tables.RunTables.ReachedReports(result);
        if (reached == 0)
            return null;
        var reports = ChosenReports(reached, 4);
        var levels = result.Grid.Sample(result.Problem.Potential.Value);
        var panels = new List<Panel>();
        foreach (var history in result.Densities)
        {
            // The row of a method that stopped early would be shorter than its neighbours and shift every panel after it.
            if (history.Densities.Count <= reports[^1])
                continue;
            foreach (var report in reports)
            {
                var greatest = result.Densities.Where(other => report < other.Densities.Count).Max(other => other.Densities[report].Values.Max());
                panels.Add(MapOf(result, labels, style, history.Densities[report], greatest, levels) with
                {
                    Title = (report == reports[0] ? history.Method + ", " : "") + TimeTitle(result.Plan.ReportTimes[report], labels),
                });
            }
        }

        return panels.Count == 0 ? null : new Figure(
            "density-maps", "Density at chosen times",
            "Each row is a method, each column a time. Every column is scaled to its own greatest density.",
            panels, reports.Count)
        {
            LegendNotes = MapNotes(labels, style),
        };
    }

    private static Figure? Walkers(ComparisonResult result, CaseLabels labels, FigureStyle style)
    {
        var background = result.Densities.FirstOrDefault(history => history.Method == "exact") ?? (result.Densities.Count > 0 ? result.Densities[0] : null);
        if (background is null || background.Densities.Count == 0 || result.Walkers.Count == 0)
            return null;
        var reports = ChosenReports(Math.Min(background.Densities.Count, result.Walkers.Min(walkers => walkers.X.Count)), 3);
        if (reports.Count == 0)
            return null;
        var levels = result.Grid.Sample(result.Problem.Potential.Value);
        var panels = new List<Panel>();
        foreach (var walkers in result.Walkers)
        {
            foreach (var report in reports)
            {
                var density = background.Densities[report];
                panels.Add(MapOf(result, labels, style, density, density.Values.Max(), levels) with
                {
                    Title = (report == reports[0] ? walkers.Sampler + ", " : "") + TimeTitle(result.Plan.ReportTimes[report], labels),
                    PointsX = [.. walkers.X[report].Take(MostWalkers)],
                    PointsY = [.. walkers.Y[report].Take(MostWalkers)],
                });
            }
        }

        var shown = Math.Min(MostWalkers, result.Walkers.Max(walkers => walkers.X.Count > 0 ? walkers.X[0].Length : 0));
        return new Figure(
            "walkers", "Walkers over the density of the " + (background.Method == "exact" ? "exact flow" : background.Method),
            string.Create(CultureInfo.InvariantCulture, $"Each row is an ensemble, each column a time: the first {shown} of {result.WalkerCount} walkers. Every map is scaled to its own greatest density."),
            panels, reports.Count)
        {
            LegendNotes = [.. MapNotes(labels, style), new LegendNote("walker", LegendSign.Walker)],
        };
    }

    private static Figure Transport(ComparisonResult result, CaseLabels labels, FigureStyle style, TransportPicture map, string name)
    {
        var levels = result.Grid == map.From.Grid ? result.Grid.Sample(result.Problem.Potential.Value) : null;
        var panel = MapOf(result, labels, style, map.From, map.From.Values.Max(), levels) with { Arrows = ArrowsOf(map) };
        return new Figure(
            name, "Transport map: " + map.Title,
            "Each arrow runs from a place to where the optimal map carries what is there. Drawn where the density is above 1 % of its greatest value.",
            [panel])
        {
            LegendNotes = [.. MapNotes(labels, style), new LegendNote("where mass is carried", LegendSign.Arrow)],
        };
    }

    /// <summary>Arrows on an even lattice of about 8 by 8 over the part of the domain that holds mass.</summary>
    internal static IReadOnlyList<(double FromX, double FromY, double ToX, double ToY)> ArrowsOf(TransportPicture map, int across = 8)
    {
        var grid = map.From.Grid;
        var threshold = 0.01 * map.From.Values.Max();
        var (left, right, lower, upper) = (grid.Nx, -1, grid.Ny, -1);
        for (var i = 0; i < map.From.Values.Length; i++)
        {
            if (map.From.Values[i] < threshold)
                continue;
            var (column, row) = (i % grid.Nx, i / grid.Nx);
            (left, right, lower, upper) = (Math.Min(left, column), Math.Max(right, column), Math.Min(lower, row), Math.Max(upper, row));
        }

        var stride = Math.Max(1, Math.Max(right - left, upper - lower) / across);
        var arrows = new List<(double, double, double, double)>();
        for (var row = lower + stride / 2; row <= upper; row += stride)
        {
            for (var column = left + stride / 2; column <= right; column += stride)
            {
                var i = row * grid.Nx + column;
                if (map.From.Values[i] < threshold)
                    continue;
                var (x, y) = (grid.X.Center(column), grid.Y!.Center(row));
                arrows.Add((x, y, x + map.DisplacementX[i], y + map.DisplacementY[i]));
            }
        }

        return arrows;
    }

    private static MapPanel MapOf(ComparisonResult result, CaseLabels labels, FigureStyle style, Density density, double greatest, double[]? levels)
    {
        var least = levels?.Min() ?? 0;
        return new MapPanel("", CaseLabels.WithUnit("x", labels.Length), CaseLabels.WithUnit("y", labels.Length), density, greatest)
        {
            Levels = levels,
            LevelValues = [.. style.LevelsInTemperature.Select(level => least + level * result.Problem.Temperature)],
        };
    }

    private static IReadOnlyList<LegendNote> MapNotes(CaseLabels labels, FigureStyle style) =>
    [
        new LegendNote(CaseLabels.WithUnit("density, 0 to the greatest", labels.Density(2)), LegendSign.ColorScale),
        new LegendNote("V at " + string.Join(", ", style.LevelsInTemperature.Select(level => Shown(level))) + " T above its least value", LegendSign.Level),
    ];

    // The lower end of a logarithmic scale: below everything after the start, but no more than five decades. All methods share the start, where
    // their distances are rounding; that would stretch the scale over decades that say nothing.
    internal static double? Floor(IEnumerable<Curve> curves)
    {
        var (low, high) = (double.PositiveInfinity, 0.0);
        foreach (var curve in curves)
        {
            for (var i = 1; i < curve.Y.Count; i++)
            {
                if (double.IsFinite(curve.Y[i]) && curve.Y[i] > 0)
                    (low, high) = (Math.Min(low, curve.Y[i]), Math.Max(high, curve.Y[i]));
            }
        }

        return double.IsFinite(low) ? Math.Max(low, high / 1e5) / 1.6 : null;
    }

    // The yardstick's own error, where the scale reaches that far down: a fine grid's would press everything else together.
    private static string AddGridError(ComparisonResult result, CaseLabels labels, FigureStyle style, List<Curve> curves, ref double? floor)
    {
        var errors = result.GridErrors.Take(result.Plan.ReportTimes.Count).ToList();
        var known = errors.Skip(1).Where(error => error is > 0).Select(error => error!.Value).ToList();
        if (known.Count == 0)
            return "";
        if (floor is { } low && known.Max() < low / GridReach)
            return $" The grid error lies below the scale: at most {Shown(known.Max())}{(labels.Length is null ? "" : " " + labels.Length)}.";
        curves.Add(new Curve("grid error of the exact flow", [.. result.Plan.ReportTimes.Take(errors.Count)], [.. errors.Select(error => error ?? double.NaN)], style.Equilibrium));
        floor = Math.Min(floor ?? double.PositiveInfinity, Math.Max(known.Min(), (floor ?? known.Min()) / GridReach) / 1.6);
        return "";
    }

    // Walkers drawn in one map.
    private const int MostWalkers = 250;

    // How far below everything else the grid error may lie and still be drawn, as a factor.
    private const double GridReach = 30;

    private static string NoiseLabel(ComparisonResult result)
        => string.Create(CultureInfo.InvariantCulture, $"noise of {result.WalkerCount} walkers, up to its 95 % point");

    private static (double From, double To) ShownRange(ComparisonResult result, IReadOnlyList<int> reports)
    {
        // The part of the axis that ever holds mass worth drawing, a little widened.
        var grid = result.Grid.X;
        var (first, last) = (grid.Cells, -1);
        foreach (var values in reports.SelectMany(report => result.Densities.Where(history => report < history.Densities.Count).Select(history => history.Densities[report].Values)).Append(result.Equilibrium.Values))
        {
            var threshold = 2e-3 * values.Max();
            for (var i = 0; i < values.Length; i++)
            {
                if (values[i] > threshold)
                    (first, last) = (Math.Min(first, i), Math.Max(last, i));
            }
        }

        var pad = (last - first) / 12;
        return last < first ? (grid.Interval.From, grid.Interval.To) : (grid.Edge(Math.Max(0, first - pad)), grid.Edge(Math.Min(grid.Cells, last + 1 + pad)));
    }

    private static IEnumerable<(string Method, List<SeriesRow> Rows)> RowsByMethod(ComparisonResult result)
        => result.Series.GroupBy(row => row.Method).Select(group => (group.Key, group.ToList()));

    private static string TimeTitle(double time, CaseLabels labels) => "t = " + Shown(time) + (labels.Time is null ? "" : " " + labels.Time);

    private static string Shown(double value) => Numbers.Short(value).Replace('-', '−');
}

/// <summary>Looks by method name: the same in every figure and on the page.</summary>
internal sealed class MethodLooks
{
    private readonly Dictionary<string, CurveLook> looks = [];

    /// <summary>Gives every method of a result its look, by its place among its kind.</summary>
    public MethodLooks(ComparisonResult result, FigureStyle style)
    {
        var (flows, samplers) = (0, 0);
        var flowNames = result.Densities.Select(history => history.Method).Concat(result.Series.Where(row => row.Kind == SeriesKind.Flow).Select(row => row.Method)).Distinct().ToList();
        foreach (var name in flowNames)
            looks[name] = style.LookOf(name, name == "exact" ? 0 : flows++, isSampler: false);
        var samplerNames = result.Walkers.Select(walkers => walkers.Sampler).Concat(result.Series.Where(row => row.Kind == SeriesKind.Ensemble).Select(row => row.Method))
            .Concat(result.Budget.Select(row => row.Sampler)).Distinct();
        foreach (var name in samplerNames)
            looks.TryAdd(name, style.LookOf(name, samplers++, isSampler: true));
        Order = [.. looks.Keys];
        Fallback = style.Equilibrium;
    }

    /// <summary>All methods, flows first.</summary>
    public IReadOnlyList<string> Order { get; }

    private CurveLook Fallback { get; }

    /// <summary>The look of a method.</summary>
    public CurveLook this[string method] => looks.GetValueOrDefault(method, Fallback);
}
