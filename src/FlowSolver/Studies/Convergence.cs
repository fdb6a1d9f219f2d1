using System.Diagnostics;
using FlowSolver.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>What a convergence study varies from level to level.</summary>
public enum ConvergenceVariable
{
    /// <summary>The step: level 1 has the case's step, each further level half of the one before. The grid stays.</summary>
    Step,

    /// <summary>The cells: the last level has the case's cells, each level before it half on each axis. The step stays.</summary>
    Cells,

    /// <summary>Both, level by level.</summary>
    Both,
}

/// <summary>One method on one level: a row of <c>orders.csv</c>.</summary>
/// <param name="Method">Scheme.</param>
/// <param name="Level">Level, from 1 (coarse).</param>
/// <param name="Step">τ.</param>
/// <param name="Cells">Cells along x.</param>
/// <param name="ErrorDistance">W2 to the reference at the last report time; null when the method failed on this level.</param>
/// <param name="ErrorVariation">∫|ρ − ρ_reference| (L1; twice the total variation).</param>
/// <param name="ErrorFreeEnergy">|F(ρ) − F(ρ_reference)|.</param>
/// <param name="ObservedOrder">log₂ of the error's fall from the level before; null on the first level and beside a missing error.</param>
/// <param name="AtFloor">Whether the error is too close to the reference's own error, or to rounding, to say anything about the order.</param>
/// <param name="Seconds">Wall-clock seconds.</param>
public sealed record ConvergenceRow(
    string Method, int Level, double Step, int Cells, double? ErrorDistance, double? ErrorVariation, double? ErrorFreeEnergy,
    double? ObservedOrder, bool AtFloor, double Seconds);

/// <summary>The order of one method over all levels that count.</summary>
/// <param name="Method">Scheme.</param>
/// <param name="FittedOrder">Slope of log error against log size over the levels above the floor; null when fewer than two are.</param>
/// <param name="LevelsUsed">Number of levels in the fit.</param>
/// <param name="ExpectedOrder">Order that the scheme promises; null for a method without a stepping error when the step varies.</param>
public sealed record ConvergenceFit(string Method, double? FittedOrder, int LevelsUsed, int? ExpectedOrder);

/// <summary>What a convergence study found.</summary>
/// <param name="Variable">What was varied.</param>
/// <param name="Rows">By method and then level.</param>
/// <param name="Fits">By method.</param>
/// <param name="Floor">W2 error below which a row is marked: twice the reference's own error, and no less than rounding.</param>
/// <param name="Reference">What the errors are measured against, as a sentence.</param>
/// <param name="Remarks">Warnings and failures.</param>
/// <param name="Interrupted">Whether the study was stopped before its end; then the rows that were finished are there.</param>
public sealed record ConvergenceResult(
    ConvergenceVariable Variable, IReadOnlyList<ConvergenceRow> Rows, IReadOnlyList<ConvergenceFit> Fits, double Floor, string Reference,
    IReadOnlyList<Remark> Remarks, bool Interrupted);

/// <summary>A finished piece of a study, which a stopped study can hand back when it is resumed.</summary>
/// <param name="Method">Scheme.</param>
/// <param name="Level">Level, from 1.</param>
/// <param name="ErrorDistance">W2 error; null when the method failed.</param>
/// <param name="ErrorVariation">L1 error.</param>
/// <param name="ErrorFreeEnergy">Free-energy error.</param>
/// <param name="Seconds">Wall-clock seconds.</param>
/// <param name="Failure">Why it failed; null when it did not.</param>
public sealed record ConvergencePiece(
    string Method, int Level, double? ErrorDistance, double? ErrorVariation, double? ErrorFreeEnergy, double Seconds, string? Failure);

/// <summary>
/// Convergence curves: the same case at several steps or grids, errors at the last report time, observed orders level by level and fitted.
/// </summary>
/// <remarks>
/// When the step varies, the reference is the exact flow on the same grid, so that what is measured is the step alone; it is uncertain by its own
/// grid error only where a method has a grid error of another kind, and rows below twice that error are marked and left out of the fit. When the
/// cells vary, the reference is the same method on twice the finest cells, so that what is measured is the grid alone. When both vary, it is the exact
/// flow on twice the finest cells. Pieces run side by side, each on one thread; the numbers do not depend on how many run at once.
/// </remarks>
public static class Convergence
{
    private const double RoundingShare = 1e-11;

    /// <summary>Runs a study.</summary>
    /// <param name="problem">The problem.</param>
    /// <param name="grid">The case's grid.</param>
    /// <param name="plan">The case's reports and step.</param>
    /// <param name="schemes">Methods.</param>
    /// <param name="variable">What varies.</param>
    /// <param name="levels">Number of levels, at least 2.</param>
    /// <param name="team">Threads.</param>
    /// <param name="known">Pieces finished by an earlier, stopped study of the same case; none by default.</param>
    /// <param name="finished">Called for each piece as it is finished, from any thread but never from two at once.</param>
    /// <param name="cancellation">Stops the study; the result then holds what was finished.</param>
    /// <exception cref="InputException">The cells cannot be halved that often.</exception>
    public static ConvergenceResult Run(
        Problem problem, Grid grid, TimePlan plan, IReadOnlyList<FlowScheme> schemes, ConvergenceVariable variable, int levels, WorkerTeam team,
        IReadOnlyList<ConvergencePiece>? known = null, Action<ConvergencePiece>? finished = null, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(plan);
        ArgumentNullException.ThrowIfNull(schemes);
        ArgumentNullException.ThrowIfNull(team);
        Require.AtLeast(levels, 2);
        var settings = Levels(grid, plan, variable, levels);
        var finest = settings[^1];
        var pieces = new Dictionary<(string, int), ConvergencePiece>();
        foreach (var piece in known ?? [])
            pieces[(piece.Method, piece.Level)] = piece;
        var interrupted = false;
        try
        {
            RunPieces(problem, schemes, variable, settings, team, pieces, finished, cancellation);
        }
        catch (OperationCanceledException)
        {
            interrupted = true;
        }

        var floor = Math.Max(RoundingShare * problem.Domain.X.Length, variable == ConvergenceVariable.Cells || interrupted
            ? 0
            : 2 * YardstickError(problem, variable == ConvergenceVariable.Both ? Doubled(finest.Grid) : finest.Grid, plan, team));
        var rows = new List<ConvergenceRow>();
        var fits = new List<ConvergenceFit>();
        var remarks = new List<Remark>();
        foreach (var scheme in schemes)
        {
            var own = Rows(scheme, settings, pieces, floor, variable, remarks);
            rows.AddRange(own);
            fits.Add(Fit(scheme, own, variable));
        }

        if (interrupted)
            remarks.Add(new Remark(null, null, "The study was interrupted; the levels that were finished are here.", true));
        return new ConvergenceResult(variable, rows, fits, floor, ReferenceSentence(variable), remarks, interrupted);
    }

    private sealed record Setting(int Level, Grid Grid, TimePlan Plan);

    private static List<Setting> Levels(Grid grid, TimePlan plan, ConvergenceVariable variable, int levels)
    {
        var settings = new List<Setting>();
        var times = plan.ReportTimes.Skip(1).ToArray();
        var current = grid;
        var grids = new List<Grid> { grid };
        for (var k = 1; k < levels && variable != ConvergenceVariable.Step; k++)
        {
            current = current.Halved() ?? throw new InputException(new InputFault(
                $"The grid of {grid.Nx}{(grid.Y is null ? "" : $" x {grid.Ny}")} cells cannot be halved {levels - 1} times.",
                $"Use fewer levels, or a number of cells that is a multiple of {1 << (levels - 1)} and at least {4 << (levels - 1)} on each axis.", Key: "domain"));
            grids.Insert(0, current);
        }

        for (var level = 1; level <= levels; level++)
        {
            var step = variable == ConvergenceVariable.Cells ? plan.Step : plan.Step / (1 << (level - 1));
            settings.Add(new Setting(level, variable == ConvergenceVariable.Step ? grid : grids[level - 1], new TimePlan(step, times)));
        }

        return settings;
    }

    private static Grid Doubled(Grid grid)
        => new(new Axis(grid.X.Interval, 2 * grid.Nx), grid.Y is null ? null : new Axis(grid.Y.Interval, 2 * grid.Ny));

    private static string ReferenceSentence(ConvergenceVariable variable) => variable switch
    {
        ConvergenceVariable.Step => "Errors are against the exact flow on the same grid: they show the step alone.",
        ConvergenceVariable.Cells => "Errors are against the same method on twice the finest cells: they show the grid alone.",
        _ => "Errors are against the exact flow on twice the finest cells: they show step and grid together.",
    };

    private static void RunPieces(
        Problem problem, IReadOnlyList<FlowScheme> schemes, ConvergenceVariable variable, List<Setting> settings, WorkerTeam team,
        Dictionary<(string, int), ConvergencePiece> pieces, Action<ConvergencePiece>? finished, CancellationToken cancellation)
    {
        var references = References(problem, schemes, variable, settings, team, cancellation);
        // The finest levels take longest: started first, they do not leave one thread working alone at the end.
        var jobs = settings.OrderByDescending(setting => setting.Level)
            .SelectMany(setting => schemes.Select(scheme => (scheme, setting)))
            .Where(job => !pieces.ContainsKey((job.scheme.Traits.Name, job.setting.Level))).ToArray();
        var gate = new Lock();
        team.Run(jobs.Length, index =>
        {
            var (scheme, setting) = jobs[index];
            var clock = Stopwatch.StartNew();
            var (density, failure) = Solve(problem, setting.Grid, setting.Plan, scheme, WorkerTeam.Alone, cancellation);
            var piece = density is null
                ? new ConvergencePiece(scheme.Traits.Name, setting.Level, null, null, null, clock.Elapsed.TotalSeconds, failure)
                : Measure(problem, density, references[(variable == ConvergenceVariable.Cells ? scheme.Traits.Name : "exact", setting.Grid.Nx)], scheme, setting.Level, clock);
            lock (gate)
            {
                pieces[(piece.Method, piece.Level)] = piece;
                finished?.Invoke(piece);
            }
        });
    }

    // The reference on each grid of the study, by name and cells along x.
    private static Dictionary<(string, int), Density> References(
        Problem problem, IReadOnlyList<FlowScheme> schemes, ConvergenceVariable variable, List<Setting> settings, WorkerTeam team, CancellationToken cancellation)
    {
        var references = new Dictionary<(string, int), Density>();
        var finest = settings[^1];
        if (variable == ConvergenceVariable.Step)
        {
            references[("exact", finest.Grid.Nx)] = Solve(problem, finest.Grid, finest.Plan, new ExactFlowScheme(), team, cancellation).Density!;
            return references;
        }

        var doubled = Doubled(finest.Grid);
        foreach (var scheme in variable == ConvergenceVariable.Cells ? schemes : [new ExactFlowScheme()])
        {
            if (Solve(problem, doubled, finest.Plan, scheme, team, cancellation).Density is not { } density)
                continue;
            for (var level = settings.Count - 1; level >= 0; level--)
            {
                density = density.CoarsenedTo(settings[level].Grid);
                references[(scheme.Traits.Name, density.Grid.Nx)] = density;
            }
        }

        return references;
    }

    private static (Density? Density, string? Failure) Solve(
        Problem problem, Grid grid, TimePlan plan, FlowScheme scheme, WorkerTeam team, CancellationToken cancellation)
    {
        var onGrid = new GridProblem(problem, grid);
        using var run = scheme.Begin(onGrid, StartOnGrid.Create(problem.Start, grid), team);
        for (var report = 1; report < plan.ReportTimes.Count; report++)
        {
            var whole = scheme.Traits.OrderInTime is null;
            for (var k = 0; k < (whole ? 1 : plan.StepsBefore(report)); k++)
            {
                cancellation.ThrowIfCancellationRequested();
                var step = run.Advance(whole ? plan.ReportTimes[report] - plan.ReportTimes[report - 1] : plan.StepLengthBefore(report));
                if (step.Failure is not null)
                    return (null, FormattableString.Invariant($"Step {run.StepsTaken} of length {plan.Step}: {step.Failure}"));
            }
        }

        return (run.Snapshot(), null);
    }

    private static ConvergencePiece Measure(Problem problem, Density density, Density reference, FlowScheme scheme, int level, Stopwatch clock)
    {
        var onGrid = new GridProblem(problem, density.Grid);
        return new ConvergencePiece(
            scheme.Traits.Name, level,
            DensityDistance.Between(density, reference, WorkerTeam.Alone)?.Distance,
            2 * TotalVariation.Between(density, reference),
            Math.Abs(onGrid.FreeEnergy(density.Values) - onGrid.FreeEnergy(reference.Values)), clock.Elapsed.TotalSeconds, null);
    }

    private static double YardstickError(Problem problem, Grid grid, TimePlan plan, WorkerTeam team)
    {
        var onGrid = new GridProblem(problem, grid);
        var last = new TimePlan(plan.ReportTimes[^1], [plan.ReportTimes[^1]]);
        if (ExactFlowYardstick.RunOnHalf(onGrid, last, team) is not { } half)
            return 0;
        var (density, _) = Solve(problem, grid, last, new ExactFlowScheme(), team, CancellationToken.None);
        return ExactFlowYardstick.RichardsonShare * (DensityDistance.Between(half[^1], density!, team)?.Distance ?? 0);
    }

    private static List<ConvergenceRow> Rows(
        FlowScheme scheme, List<Setting> settings, Dictionary<(string, int), ConvergencePiece> pieces, double floor, ConvergenceVariable variable, List<Remark> remarks)
    {
        var rows = new List<ConvergenceRow>();
        foreach (var setting in settings)
        {
            if (!pieces.TryGetValue((scheme.Traits.Name, setting.Level), out var piece))
                continue;
            if (piece.Failure is not null)
                remarks.Add(new Remark(scheme.Traits.Name, null, $"Level {setting.Level}: {piece.Failure}", true));
            var before = rows.Count > 0 && rows[^1].Level == setting.Level - 1 ? rows[^1].ErrorDistance : null;
            double? order = before > 0 && piece.ErrorDistance > 0 ? Math.Log2(before.Value / piece.ErrorDistance.Value) : null;
            var exact = scheme.Traits.OrderInTime is null && variable == ConvergenceVariable.Step;
            rows.Add(new ConvergenceRow(
                scheme.Traits.Name, setting.Level, setting.Plan.Step, setting.Grid.Nx, piece.ErrorDistance, piece.ErrorVariation, piece.ErrorFreeEnergy,
                exact ? null : order, exact || piece.ErrorDistance is null || piece.ErrorDistance < floor, piece.Seconds));
        }

        return rows;
    }

    private static ConvergenceFit Fit(FlowScheme scheme, List<ConvergenceRow> rows, ConvergenceVariable variable)
    {
        var used = rows.Where(row => !row.AtFloor && row.ErrorDistance > 0).ToList();
        int? expected = variable switch
        {
            ConvergenceVariable.Step => scheme.Traits.OrderInTime,
            ConvergenceVariable.Cells => scheme.Traits.OrderInSpace,
            _ => scheme.Traits.OrderInTime is { } inTime ? Math.Min(inTime, scheme.Traits.OrderInSpace) : scheme.Traits.OrderInSpace,
        };
        if (used.Count < 2)
            return new ConvergenceFit(scheme.Traits.Name, null, used.Count, expected);
        // Sizes fall by halves from level to level, so the level itself is the logarithm of the size.
        var meanLevel = used.Average(row => (double)row.Level);
        var meanLog = used.Average(row => Math.Log2(row.ErrorDistance!.Value));
        var slope = used.Sum(row => (row.Level - meanLevel) * (Math.Log2(row.ErrorDistance!.Value) - meanLog)) / used.Sum(row => (row.Level - meanLevel) * (row.Level - meanLevel));
        return new ConvergenceFit(scheme.Traits.Name, -slope, used.Count, expected);
    }
}
