using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Schemes.Splitting;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>The bias of a method at one step, W2 in units of length.</summary>
/// <param name="Step">τ.</param>
/// <param name="StationaryBias">W2(stationary law, equilibrium); null when no stationary law was reached.</param>
/// <param name="TransientBias">Largest W2(law, exact flow) over the report times; null when the law cannot be followed.</param>
public sealed record StepBias(double Step, double? StationaryBias, double? TransientBias)
{
    /// <summary>The larger of the two; null when either is missing.</summary>
    public double? Worst => StationaryBias is { } stationary && TransientBias is { } transient ? Math.Max(stationary, transient) : null;
}

/// <summary>What is suggested for one method: a row of <c>suggest.csv</c>.</summary>
/// <param name="Method">Scheme or sampler; where both have the same law, the scheme and the sampler have a row each.</param>
/// <param name="Suggested">The largest step found whose bias stays under the bound, with its bias; null when none was found.</param>
/// <param name="AtHalf">The same at half the step.</param>
/// <param name="AtDouble">The same at twice the step; its biases are null where the method is not stable there.</param>
/// <param name="StableStep">Step from which on an explicit part is unstable where probability is, 2/(M·fraction·L); null where there is no such limit.</param>
/// <param name="StepsToEquilibrium">Steps of the suggested length until W2(law, equilibrium) is at most the aim, from the start; null when it is not reached.</param>
/// <param name="StepsAreExtrapolated">Whether that number was continued from the rate of the last steps followed.</param>
/// <param name="EvaluationsPerStep">Gradient evaluations of one step of one walker: one an explicit step; for a proximal step the mean number of Newton's iterations at equilibrium, to a residual of 1e-12; null with a flow map, whose cost is that of its integrator, and for proximal steps on a V with kinks.</param>
/// <param name="EvaluationsToEquilibrium">Both multiplied.</param>
/// <param name="Note">A sentence for the reader; empty for none.</param>
public sealed record StepSuggestionRow(
    string Method, StepBias? Suggested, StepBias? AtHalf, StepBias? AtDouble, double? StableStep, long? StepsToEquilibrium, bool StepsAreExtrapolated,
    double? EvaluationsPerStep, double? EvaluationsToEquilibrium, string Note);

/// <summary>What a search for steps found.</summary>
/// <param name="Bias">Bias asked for.</param>
/// <param name="Aim">W2 to equilibrium that <see cref="StepSuggestionRow.StepsToEquilibrium"/> counts to.</param>
/// <param name="GridFloor">W2 error of the exact flow on the grid that was used (from half the cells), at worst over the report times; null where it cannot be told. Biases below it mean nothing.</param>
/// <param name="Cells">Cells along x of the grid that was used.</param>
/// <param name="Rows">One a method.</param>
/// <param name="Interrupted">Whether the search was stopped before its end.</param>
public sealed record StepSuggestionResult(
    double Bias, double Aim, double? GridFloor, int Cells, IReadOnlyList<StepSuggestionRow> Rows, bool Interrupted);

/// <summary>
/// Finds the largest step whose bias stays under a bound, for splitting schemes and for samplers with a law on the grid, by following the law itself.
/// </summary>
/// <remarks>
/// <para>
/// Stationary law: steps from equilibrium on, until nothing changes; when what still changes is one slow mode (mass that goes from well to well), it is extrapolated and followed on (Aitken's
/// process on the density). Transient: steps from the start on, along a plan whose reports are those of the case, against the exact flow at the same times on the same grid.
/// </para>
/// <para>
/// Steps are tried in factors of two until the bound lies between two of them, then by the secant of log bias against log step; the step reported is the longest that was tried and found good, within 3 % of
/// one that was not. Beyond the stability limit of an explicit part, and beyond the last report time, none is tried. On a line, coarse grids are refined to at least 1024 cells; on the plane, grids are coarsened to at most 128 cells an axis.
/// </para>
/// </remarks>
public static class StepSuggestion
{
    private const int LeastCellsOnLine = 1024;
    private const int MostCellsOnPlane = 128;
    private const int MostReports = 12;
    private const long MostSteps = 20_000;
    private const double Closeness = 1.03;

    /// <summary>Searches.</summary>
    /// <param name="problem">The problem.</param>
    /// <param name="grid">The case's grid; the search uses its own refinement of it.</param>
    /// <param name="plan">The case's plan: its step is where the search begins, its last report the horizon.</param>
    /// <param name="bias">Bound on W2, above 0.</param>
    /// <param name="team">Threads.</param>
    /// <param name="methods">Names of splitting schemes and samplers; null for all that have a law.</param>
    /// <param name="aim">W2 to equilibrium to count steps to; null for twice the bias.</param>
    /// <param name="progress">Receives the share done.</param>
    /// <param name="cancellation">Stops the search; rows found so far are kept.</param>
    /// <exception cref="InputException">A name is that of no method with a law.</exception>
    public static StepSuggestionResult Search(
        Problem problem, Grid grid, TimePlan plan, double bias, WorkerTeam team, IReadOnlyList<string>? methods = null, double? aim = null,
        IProgress<double>? progress = null, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(grid);
        ArgumentNullException.ThrowIfNull(plan);
        ArgumentNullException.ThrowIfNull(team);
        Require.Positive(bias);
        var target = aim is { } given ? Require.Positive(given, nameof(aim)) : 2 * bias;
        var chosen = Choose(methods, grid.Dimension);
        var search = new Searcher(problem, Working(grid), plan, bias, target, team, cancellation);
        var rows = new List<StepSuggestionRow>();
        var known = new Dictionary<SplittingScheme, StepSuggestionRow>();
        try
        {
            search.Prepare();
            foreach (var (name, law) in chosen)
            {
                // A sampler and the scheme that is its law share the search.
                var same = known.Keys.FirstOrDefault(other => other.Recipe.Parts.SequenceEqual(law.Recipe.Parts));
                var row = same is null ? search.Row(name, law) : known[same] with { Method = name };
                known[same ?? law] = row;
                rows.Add(row);
                progress?.Report(rows.Count / (double)chosen.Count);
            }
        }
        catch (OperationCanceledException)
        {
            return new StepSuggestionResult(bias, target, search.GridFloor, search.Cells, rows, true);
        }

        return new StepSuggestionResult(bias, target, search.GridFloor, search.Cells, rows, false);
    }

    private static List<(string Name, SplittingScheme Law)> Choose(IReadOnlyList<string>? methods, int dimension)
    {
        var all = SchemeCatalogue.All.OfType<SplittingScheme>().Select(scheme => (scheme.Traits.Name, Law: scheme))
            .Concat(SamplerCatalogue.All.Where(sampler => sampler.Traits.Law is SplittingScheme).Select(sampler => (sampler.Traits.Name, Law: (SplittingScheme)sampler.Traits.Law!)))
            .Where(method => method.Law.Traits.Dimensions.Contains(dimension)).ToList();
        if (methods is null)
            return all;
        var faults = methods.Where(name => all.All(method => method.Name != name)).Select(name => new InputFault(
            $"The method \"{name}\" has no law that a step could be suggested by; it must be one of {string.Join(", ", all.Select(method => method.Name))}.")).ToList();
        return faults.Count > 0 ? throw new InputException(faults) : [.. methods.Select(name => all.First(method => method.Name == name))];
    }

    private static Grid Working(Grid grid)
    {
        var axisX = Fit(grid.X, grid.Y is null);
        return new Grid(axisX, grid.Y is null ? null : Fit(grid.Y, false));

        static Axis Fit(Axis axis, bool line)
        {
            var cells = axis.Cells;
            while (line && cells < LeastCellsOnLine)
                cells *= 2;
            while (!line && cells > MostCellsOnPlane && cells % 2 == 0)
                cells /= 2;
            return new Axis(axis.Interval, cells);
        }
    }

    private sealed class Searcher(
        Problem problem, Grid grid, TimePlan plan, double bias, double aim, WorkerTeam team, CancellationToken cancellation)
    {
        private readonly GridProblem onGrid = new(problem, grid);
        private readonly Density start = StartOnGrid.Create(problem.Start, grid);
        private readonly List<double> reports = [0];
        private readonly List<Density> exact = [];
        private Inspection inspection = null!;

        public double? GridFloor { get; private set; }

        public int Cells => grid.Nx;

        public void Prepare()
        {
            var last = plan.ReportTimes[^1];
            // Times that double towards the horizon see the fast beginning, even ones the rest.
            for (var k = MostReports / 2; k >= 1; k--)
                reports.Add(last * Math.Pow(0.5, k) / (MostReports / 2));
            for (var k = 1; k <= MostReports / 2; k++)
                reports.Add(last * k / (MostReports / 2));
            var times = reports.Distinct().Order().ToArray();
            reports.Clear();
            reports.AddRange(times);
            inspection = Inspection.Of(problem, grid, plan, 0);
            using var run = new ExactFlowScheme().Begin(onGrid, start, team);
            for (var k = 1; k < reports.Count; k++)
            {
                cancellation.ThrowIfCancellationRequested();
                run.Advance(reports[k] - reports[k - 1]);
                exact.Add(run.Snapshot());
            }

            if (ExactFlowYardstick.RunOnHalf(onGrid, new TimePlan(last, reports), team, cancellation) is { } coarse)
            {
                // The error of the fine grid is a third of its distance to the coarse one (second order).
                var worst = 0.0;
                for (var k = 0; k < exact.Count; k++)
                    worst = Math.Max(worst, Distance(exact[k], coarse[k + 1]) ?? 0);
                GridFloor = worst * ExactFlowYardstick.RichardsonShare;
            }
        }

        public StepSuggestionRow Row(string name, SplittingScheme law)
        {
            var stable = StableStep(law);
            var longest = Math.Min(reports[^1], stable is { } limit ? 0.98 * limit : double.PositiveInfinity);
            var (suggested, note) = Find(law, longest);
            if (suggested is null)
                return new StepSuggestionRow(name, null, null, null, stable, null, false, null, null, note);
            var half = Bias(law, 0.5 * suggested.Step);
            var twice = 2 * suggested.Step <= longest ? Bias(law, 2 * suggested.Step) : new StepBias(2 * suggested.Step, null, null);
            var (steps, extrapolated) = StepsTo(law, suggested.Step);
            var evaluations = EvaluationsPerStep(law, suggested.Step);
            return new StepSuggestionRow(name, suggested, half, twice, stable, steps, extrapolated, evaluations, steps * evaluations, note);
        }

        private double? StableStep(SplittingScheme law)
        {
            var share = law.Recipe.Parts.Where(part => part.Map == TransportMap.Gradient).Select(part => part.Fraction).DefaultIfEmpty(0).Sum();
            // Beside a proximal half of the same length an explicit half is stable at any step: their factors multiply to (1 − z/2)/(1 + z/2).
            var damped = law.Recipe.Parts.Where(part => part.Map == TransportMap.Proximal).Select(part => part.Fraction).DefaultIfEmpty(0).Sum() >= share;
            return share > 0 && !damped ? inspection.StableStep / share : null;
        }

        private (StepBias? Best, string Note) Find(SplittingScheme law, double longest)
        {
            StepBias? good = null;
            StepBias? bad = null;
            var step = Math.Min(plan.Step, longest);
            for (var tries = 0; tries < 24 && (good is null || bad is null); tries++)
            {
                var tried = Bias(law, step);
                if (tried.Worst <= bias)
                {
                    good = tried;
                    if (step >= longest)
                        return (good, "The bias stays under the bound up to the longest step there is: the stability limit or the last report time.");
                    step = Math.Min(2 * step, longest);
                }
                else
                {
                    bad = tried;
                    step *= 0.5;
                    if (step * MostSteps < reports[^1])
                        break;
                }
            }

            if (good is null)
            {
                return (null, bias < 3 * (GridFloor ?? 0)
                    ? FormattableString.Invariant($"No step was found: the bound is not well above the error of the grid itself, {GridFloor:g2}. Take more cells.")
                    : "No step was found whose bias stays under the bound.");
            }

            for (var tries = 0; tries < 12 && bad!.Step > Closeness * good.Step; tries++)
            {
                var tried = Bias(law, Between(good, bad));
                if (tried.Worst <= bias)
                    good = tried;
                else
                    bad = tried;
            }

            return (good, bias < 3 * (GridFloor ?? 0)
                ? FormattableString.Invariant($"The bound is not well above the error of the grid itself, {GridFloor:g2}: take more cells.") : "");
        }

        // Where the line through both points of log bias against log step meets the bound, nudged to either side so that the bracket closes.
        private double Between(StepBias good, StepBias bad)
        {
            var (low, high) = (Math.Log(good.Step), Math.Log(bad.Step));
            var middle = 0.5 * (low + high);
            if (good.Worst is { } g && bad.Worst is { } b && g > 0 && b > g)
                middle = low + (high - low) * Math.Clamp((Math.Log(bias) - Math.Log(g)) / (Math.Log(b) - Math.Log(g)), 0.02, 0.98);
            var nudge = 0.25 * Math.Log(Closeness);
            middle = middle - low < high - middle ? middle + nudge : middle - nudge;
            return Math.Exp(Math.Clamp(middle, low + 0.05 * (high - low), high - 0.05 * (high - low)));
        }

        private StepBias Bias(SplittingScheme law, double step)
        {
            cancellation.ThrowIfCancellationRequested();
            return new StepBias(step, Stationary(law, step) is { } density ? Distance(density, onGrid.Equilibrium) : null, Transient(law, step));
        }

        private double? Transient(SplittingScheme law, double step)
        {
            var along = new TimePlan(step, reports);
            using var run = law.Begin(onGrid, start, team);
            var worst = 0.0;
            for (var report = 1; report < reports.Count; report++)
            {
                // The plan's steps are no longer than the step tried. Where a report comes sooner than a step there is nothing to compare.
                if (reports[report] < step * (1 - 1e-9))
                    continue;
                var count = report > 1 && reports[report - 1] >= step * (1 - 1e-9)
                    ? along.StepsBefore(report) : (int)Math.Ceiling(reports[report] / step * (1 - 1e-9));
                var length = (reports[report] - run.Time) / count;
                for (var k = 0; k < count; k++)
                {
                    cancellation.ThrowIfCancellationRequested();
                    if (run.Advance(length).Failure is not null)
                        return null;
                }

                if (Distance(run.Snapshot(), exact[report - 1]) is not { } distance)
                    return null;
                worst = Math.Max(worst, distance);
            }

            return worst;
        }

        private Density? Stationary(SplittingScheme law, double step)
        {
            var enough = 1e-3 * bias;
            var density = onGrid.Equilibrium;
            // A block of steps long enough for everything but the slow modes to die out.
            var block = (int)Math.Clamp(Math.Ceiling(0.5 / (problem.Mobility * Math.Max(inspection.LargestLiveCurvature, 1e-12) * step)), 4, 400);
            using var run = law.Begin(onGrid, density, team);
            var changes = new double[2][];
            var lastRatio = double.NaN;
            for (var blocks = 0; blocks < 400; blocks++)
            {
                for (var k = 0; k < block; k++)
                {
                    cancellation.ThrowIfCancellationRequested();
                    if (run.Advance(step).Failure is not null)
                        return null;
                }

                var now = run.Snapshot();
                var change = new double[now.Values.Length];
                for (var i = 0; i < change.Length; i++)
                    change[i] = now.Values[i] - density.Values[i];
                (changes[0], changes[1]) = (changes[1], change);
                density = now;
                if (changes[0] is not { } before)
                    continue;
                var square = SpanKernels.Dot(before, before);
                // Nothing left but rounding.
                if (square * grid.CellVolume < 1e-26)
                    return density;
                var ratio = SpanKernels.Dot(change, before) / square;
                var left = ratio is > 0 and < 1 ? ratio / (1 - ratio) : 1;
                if (Moved(change) * left < enough)
                    return density;
                var steady = Math.Abs(ratio - lastRatio) < 0.02 * (1 - ratio);
                lastRatio = ratio;
                if (!steady || ratio is not (> 0.5 and < 1))
                    continue;
                var ahead = new double[change.Length];
                for (var i = 0; i < ahead.Length; i++)
                    ahead[i] = Math.Max(density.Values[i] + left * change[i], 0.01 * density.Values[i]);
                density = new Density(grid, ahead).Normalised();
                ((SplittingRun)run).Replace(density.Values);
                (changes[0], changes[1], lastRatio) = (null!, null!, double.NaN);
            }

            return null;
        }

        // W2 that a change of the density stands for, to within its order: in one dimension the root of ∫|ΔF|²/ρ would do; across wells mass moves far, so the domain's size times the root of the mass moved bounds it.
        private double Moved(double[] change)
        {
            var size = Math.Max(grid.X.Interval.Length, grid.Y?.Interval.Length ?? 0);
            var mass = 0.0;
            foreach (var value in change)
                mass += Math.Abs(value);
            mass *= 0.5 * grid.CellVolume;
            return 0.2 * size * Math.Sqrt(mass);
        }

        private (long? Steps, bool Extrapolated) StepsTo(SplittingScheme law, double step)
        {
            using var run = law.Begin(onGrid, start, team);
            var (before, stepsBefore) = (double.NaN, 0L);
            var stride = 1L;
            if (Distance(start, onGrid.Equilibrium) is not { } first)
                return (null, false);
            if (first <= aim)
                return (0, false);
            while (run.StepsTaken < MostSteps)
            {
                for (var k = 0L; k < stride; k++)
                {
                    cancellation.ThrowIfCancellationRequested();
                    if (run.Advance(step).Failure is not null)
                        return (null, false);
                }

                if (Distance(run.Snapshot(), onGrid.Equilibrium) is not { } distance)
                    return (null, false);
                if (distance <= aim)
                {
                    // Within the last stride the distance falls as a power.
                    var share = double.IsNaN(before) || stride == 1 ? 1 : Math.Log(before / aim) / Math.Log(before / distance);
                    return (stepsBefore + (long)Math.Ceiling(share * stride - 1e-9), false);
                }

                // Slowly falling distances need not be looked at after each step.
                if (!double.IsNaN(before) && distance > 0.9 * before)
                    stride = Math.Min(2 * stride, 256);
                if (run.StepsTaken + stride > MostSteps)
                {
                    var rate = Math.Log(before / distance) / (run.StepsTaken - stepsBefore);
                    return rate > 1e-12 ? (run.StepsTaken + (long)Math.Ceiling(Math.Log(distance / aim) / rate), true) : (null, false);
                }

                (before, stepsBefore) = (distance, run.StepsTaken);
            }

            return (null, false);
        }

        private double? EvaluationsPerStep(SplittingScheme law, double step)
        {
            // At a kink Newton does not end; what a walker pays there is the business of its closed form.
            if (!problem.Potential.IsSmooth && law.Recipe.Parts.Any(part => part.Map == TransportMap.Proximal))
                return null;
            var sum = 0.0;
            foreach (var part in law.Recipe.Parts)
            {
                switch (part.Map)
                {
                    case null:
                        break;
                    case TransportMap.Gradient:
                        sum++;
                        break;
                    case TransportMap.Proximal:
                        sum += ProximalCost.Iterations(onGrid, problem.Mobility * part.Fraction * step);
                        break;
                    default:
                        return null;
                }
            }

            return sum;
        }

        private double? Distance(Density a, Density b) => DensityDistance.Between(a, b, team)?.Distance;
    }
}

/// <summary>What a proximal step costs a walker.</summary>
internal static class ProximalCost
{
    /// <summary>Mean number of Newton's iterations (one evaluation of value, gradient and Hessian each) from x to the proximal point, over equilibrium; halved steps count as well.</summary>
    public static double Iterations(GridProblem problem, double length)
    {
        var grid = problem.Grid;
        var potential = problem.Problem.Potential;
        var stride = Math.Max(1, grid.CellCount / 4096);
        var scale = Math.Max(grid.X.Interval.Length, grid.Y?.Interval.Length ?? 0);
        var (weight, sum) = (0.0, 0.0);
        Span<double> jet = stackalloc double[6];
        for (var cell = 0; cell < grid.CellCount; cell += stride)
        {
            var mass = problem.Equilibrium.Values[cell];
            var (x, y) = (grid.X.Center(cell % grid.Nx), grid.Y?.Center(cell / grid.Nx) ?? 0);
            var (px, py) = (x, y);
            var count = 0;
            while (count < 60)
            {
                count++;
                potential.Jet([px], grid.Y is null ? [] : [py], new PotentialJet
                {
                    Value = jet[..1],
                    GradientX = jet.Slice(1, 1),
                    GradientY = grid.Y is null ? [] : jet.Slice(2, 1),
                    HessianXX = jet.Slice(3, 1),
                    HessianXY = grid.Y is null ? [] : jet.Slice(4, 1),
                    HessianYY = grid.Y is null ? [] : jet.Slice(5, 1),
                });
                var (gx, gy) = (px - x + length * jet[1], grid.Y is null ? 0 : py - y + length * jet[2]);
                if (Math.Abs(gx) + Math.Abs(gy) <= 1e-12 * scale)
                    break;
                var (xx, xy, yy) = (1 + length * jet[3], grid.Y is null ? 0 : length * jet[4], grid.Y is null ? 1 : 1 + length * jet[5]);
                var determinant = xx * yy - xy * xy;
                if (!(xx > 0 && determinant > 0))
                    (xx, xy, yy, determinant) = (1, 0, 1, 1);
                px -= (yy * gx - xy * gy) / determinant;
                py -= (xx * gy - xy * gx) / determinant;
            }

            weight += mass;
            sum += mass * count;
        }

        return weight > 0 ? sum / weight : 1;
    }
}
