using System.Diagnostics;
using FlowSolver.Diagnostics;
using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>What a comparison is to hold.</summary>
public sealed record ComparisonOptions
{
    /// <summary>Schemes to run and show, in the order in which tables show them. The exact flow is run as the yardstick also where it is not listed.</summary>
    public required IReadOnlyList<FlowScheme> Schemes { get; init; }

    /// <summary>Samplers to run and show.</summary>
    public IReadOnlyList<Sampler> Samplers { get; init; } = [];

    /// <summary>Walkers in each ensemble.</summary>
    public int Walkers { get; init; }

    /// <summary>Seed of the ensembles and of the simulated noise.</summary>
    public ulong Seed { get; init; } = 1;

    /// <summary>Simulated draws behind each noise floor and p-value; the least p-value is 1/(draws + 1).</summary>
    public int NoiseDraws { get; init; } = 199;

    /// <summary>Whether published error bounds are to be evaluated along the run; one dimension only.</summary>
    public bool DrawsBounds { get; init; }

    /// <summary>Walkers kept of each ensemble at each report time, for pictures.</summary>
    public int KeptWalkers { get; init; } = 1500;
}

/// <summary>How far a comparison is.</summary>
/// <param name="Report">Report times finished.</param>
/// <param name="Reports">Report times in all.</param>
/// <param name="Doing">What is being worked on.</param>
public readonly record struct ComparisonProgress(int Report, int Reports, string Doing);

/// <summary>
/// The main job: advances the density by every scheme and the walkers by every sampler along one time plan, measures all of them at every
/// report time, and splits each ensemble's distance from the exact flow into step bias, noise and grid error.
/// </summary>
/// <remarks>
/// All methods advance together from one report time to the next, so that an interrupted comparison holds every method up to the same time.
/// A method that fails stops there, with a remark; the others go on.
/// </remarks>
public static class Comparison
{
    private const double NoticedLevel = 0.05;
    private const double WrongLawLevel = 0.01;

    /// <summary>Runs the comparison. Cancellation does not throw: the result then holds what was finished and is marked interrupted.</summary>
    /// <exception cref="InputException">The start or the potential cannot be put on the grid.</exception>
    public static ComparisonResult Run(
        Problem problem, Grid grid, TimePlan plan, ComparisonOptions options, WorkerTeam team,
        IProgress<ComparisonProgress>? progress = null, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(plan);
        ArgumentNullException.ThrowIfNull(options);
        ArgumentNullException.ThrowIfNull(team);
        using var state = new State(new GridProblem(problem, grid), plan, options, team);
        for (var report = 0; report < plan.ReportTimes.Count; report++)
        {
            if (!state.AdvanceTo(report, progress, cancellation))
                return state.Result(interrupted: true);
        }

        var bounds = options.DrawsBounds && grid?.Dimension == 1 ? state.Bounds(cancellation) : [];
        progress?.Report(new ComparisonProgress(plan.ReportTimes.Count, plan.ReportTimes.Count, "done"));
        return state.Result(interrupted: false) with { Bounds = bounds };
    }

    /// <summary>
    /// Puts a distance from the exact flow into words. The order of the questions: is it larger than noise explains; if so, do the walkers follow
    /// the law that their own scheme has on the grid; if so, is that law's bias larger than what the grid leaves open.
    /// </summary>
    /// <param name="pValue">p-value of the walkers as draws of the exact flow.</param>
    /// <param name="lawPValue">p-value of the walkers as draws of the sampler's law; null where there is none.</param>
    /// <param name="stepBias">W2(law, exact flow); null where there is no law.</param>
    /// <param name="distanceToLaw">W2(walkers, law); null where there is none.</param>
    /// <param name="noise95">95 % point of the noise.</param>
    /// <param name="noiseMean">Mean of the noise.</param>
    /// <param name="total">W2(walkers, exact flow).</param>
    /// <param name="gridError">Error estimate of the exact flow; null where there is none.</param>
    public static string Verdict(
        double pValue, double? lawPValue, double? stepBias, double? distanceToLaw, double noise95, double noiseMean, double total, double? gridError)
    {
        var grid = gridError ?? 0;
        if (pValue >= NoticedLevel)
            return "within noise";
        if (lawPValue is { } ofLaw && stepBias is { } bias && distanceToLaw is { } toLaw)
        {
            if (ofLaw < WrongLawLevel && toLaw > noise95 + 2 * grid)
                return "wrong law";
            if (bias > grid + 0.1 * noiseMean)
                return "biased by the step";
        }
        else if (total > noise95 + 2 * grid)
        {
            return "differs";
        }

        return total <= noise95 + 2 * grid ? "within grid error" : "just above noise";
    }

    private sealed class FlowTrack(FlowScheme scheme, FlowRun run, bool shown)
    {
        public FlowScheme Scheme { get; } = scheme;

        public FlowRun Run { get; } = run;

        public bool Shown { get; } = shown;

        public List<Density> Densities { get; } = [];

        public List<StepRow> Steps { get; } = [];

        public Stopwatch Clock { get; } = new();

        public long Iterations { get; set; }

        public bool Failed { get; set; }

        public HashSet<string> Warned { get; } = [];
    }

    private sealed class EnsembleTrack(Sampler sampler, EnsembleRun run, FlowTrack? law)
    {
        public Sampler Sampler { get; } = sampler;

        public EnsembleRun Run { get; } = run;

        public FlowTrack? Law { get; } = law;

        public List<double[]> KeptX { get; } = [];

        public List<double[]> KeptY { get; } = [];

        public Stopwatch Clock { get; } = new();

        public bool Failed { get; set; }

        public HashSet<string> Warned { get; } = [];

        public double AcceptanceSum { get; set; }

        public int AcceptanceCount { get; set; }
    }

    private sealed class State : IDisposable
    {
        private readonly GridProblem problem;
        private readonly TimePlan plan;
        private readonly ComparisonOptions options;
        private readonly WorkerTeam team;
        private readonly List<FlowTrack> flows = [];
        private readonly List<EnsembleTrack> ensembles = [];
        private readonly FlowTrack exact;
        private readonly Generator generator;
        private IReadOnlyList<Density>? onHalf;
        private readonly List<SeriesRow> series = [];
        private readonly List<BudgetRow> budget = [];
        private readonly List<double?> gridErrors = [];
        private readonly List<Remark> remarks = [];
        private readonly Stopwatch measuring = new();
        private readonly bool plane;

        public State(GridProblem problem, TimePlan plan, ComparisonOptions options, WorkerTeam team)
        {
            this.problem = problem;
            this.plan = plan;
            this.options = options;
            this.team = team;
            plane = problem.Grid.Dimension == 2;
            generator = new Generator(problem, team);
            var start = StartOnGrid.Create(problem.Problem.Start, problem.Grid);
            foreach (var scheme in options.Schemes)
                flows.Add(new FlowTrack(scheme, scheme.Begin(problem, start, team), shown: true));
            exact = TrackOf(new ExactFlowScheme(), start);
            if (!exact.Shown)
                remarks.Add(new Remark(null, null, "The exact flow is not among the methods of the case; it was run all the same, as the yardstick.", false));
            if (problem.Grid.Halved() is null)
                remarks.Add(new Remark("exact", null, "There is no error estimate for the exact flow: it needs an even number of at least 8 cells on each axis.", false));
            foreach (var sampler in options.Samplers)
            {
                Require.AtLeast(options.Walkers, 1, "walkers");
                var law = sampler.Traits.Law is { } scheme && scheme.Traits.Dimensions.Contains(problem.Grid.Dimension) ? TrackOf(scheme, start) : null;
                ensembles.Add(new EnsembleTrack(sampler, sampler.Begin(problem.Problem, options.Walkers, options.Seed, team), law));
            }

            if (!plan.IsUniform)
            {
                remarks.Add(new Remark(null, null,
                    FormattableString.Invariant($"Some report intervals are no multiple of the step {plan.Step}; their steps were shortened to fit."), false));
            }
        }

        // Schemes are told apart by name: a sampler's law is the listed scheme of that name when there is one.
        private FlowTrack TrackOf(FlowScheme scheme, Density start)
        {
            var found = flows.Find(track => track.Scheme.Traits.Name == scheme.Traits.Name);
            if (found is not null)
                return found;
            var added = new FlowTrack(scheme, scheme.Begin(problem, start, team), shown: false);
            flows.Add(added);
            return added;
        }

        public bool AdvanceTo(int report, IProgress<ComparisonProgress>? progress, CancellationToken cancellation)
        {
            var steps = plan.StepsBefore(report);
            if (report == 0 && problem.Grid.Halved() is not null)
            {
                progress?.Report(new ComparisonProgress(0, plan.ReportTimes.Count, "exact flow on half the cells"));
                try
                {
                    onHalf = ExactFlowYardstick.RunOnHalf(problem, plan, team, cancellation);
                }
                catch (OperationCanceledException)
                {
                    return false;
                }
            }

            foreach (var track in flows)
            {
                progress?.Report(new ComparisonProgress(report, plan.ReportTimes.Count, track.Scheme.Traits.Name));
                if (!AdvanceFlow(track, report, steps, cancellation))
                    return false;
            }

            foreach (var track in ensembles)
            {
                progress?.Report(new ComparisonProgress(report, plan.ReportTimes.Count, track.Sampler.Traits.Name));
                if (!AdvanceEnsemble(track, report, steps, cancellation))
                    return false;
            }

            if (cancellation.IsCancellationRequested)
                return false;
            progress?.Report(new ComparisonProgress(report, plan.ReportTimes.Count, "distances"));
            measuring.Start();
            Measure(report, cancellation);
            measuring.Stop();
            return true;
        }

        private bool AdvanceFlow(FlowTrack track, int report, int steps, CancellationToken cancellation)
        {
            if (track.Failed)
                return true;
            track.Clock.Start();
            // The exact flow needs no steps: one leap a report.
            var leaps = track.Scheme.Traits.OrderInTime is null ? Math.Min(steps, 1) : steps;
            for (var k = 0; k < leaps && !track.Failed; k++)
            {
                if (cancellation.IsCancellationRequested)
                {
                    track.Clock.Stop();
                    return false;
                }

                var length = leaps == steps ? plan.StepLengthBefore(report) : plan.ReportTimes[report] - plan.ReportTimes[report - 1];
                var done = track.Run.Advance(length);
                track.Iterations += done.Iterations;
                var density = track.Run.Snapshot();
                // Whatever a method does in extreme cases, no number that is none gets into a table.
                if (done.Failure is null && !Array.TrueForAll(density.Values, double.IsFinite))
                    done = done with { Failure = "The density was not a number in some cell; a shorter step or more cells may help." };
                var time = k == leaps - 1 ? plan.ReportTimes[report] : track.Run.Time;
                var energy = problem.FreeEnergy(density.Values);
                if (track.Shown && double.IsFinite(energy))
                {
                    track.Steps.Add(new StepRow(track.Scheme.Traits.Name, track.Run.StepsTaken, time, done.Iterations,
                        done.Residual, done.DualGap, done.StepDistance, energy));
                }

                if (done.Warning is not null && track.Warned.Add(done.Warning))
                    remarks.Add(new Remark(track.Scheme.Traits.Name, time, done.Warning, false));
                if (done.Failure is not null)
                {
                    track.Failed = true;
                    remarks.Add(new Remark(track.Scheme.Traits.Name, time,
                        FormattableString.Invariant($"Step {track.Run.StepsTaken}: {done.Failure} The method was stopped there; what it had before is kept."), true));
                }
            }

            track.Clock.Stop();
            if (!track.Failed)
                track.Densities.Add(track.Run.Snapshot());
            return true;
        }

        private bool AdvanceEnsemble(EnsembleTrack track, int report, int steps, CancellationToken cancellation)
        {
            if (track.Failed)
                return true;
            track.Clock.Start();
            for (var k = 0; k < steps && !track.Failed; k++)
            {
                if (cancellation.IsCancellationRequested)
                {
                    track.Clock.Stop();
                    return false;
                }

                var done = track.Run.Advance(plan.StepLengthBefore(report));
                if (done.AcceptanceRate is { } rate)
                {
                    track.AcceptanceSum += rate;
                    track.AcceptanceCount++;
                }

                if (done.Warning is not null && track.Warned.Add(done.Warning))
                    remarks.Add(new Remark(track.Sampler.Traits.Name, track.Run.Time, done.Warning, false));
                if (done.Failure is not null)
                {
                    track.Failed = true;
                    remarks.Add(new Remark(track.Sampler.Traits.Name, track.Run.Time,
                        $"{done.Failure} The ensemble was stopped there; what it had before is kept.", true));
                }
            }

            track.Clock.Stop();
            if (track.Failed)
                return true;
            var kept = Math.Min(options.KeptWalkers, track.Run.X.Length);
            track.KeptX.Add(track.Run.X[..kept].ToArray());
            track.KeptY.Add(plane ? track.Run.Y[..kept].ToArray() : []);
            return true;
        }

        private void Measure(int report, CancellationToken cancellation)
        {
            var time = plan.ReportTimes[report];
            var truth = exact.Failed ? null : exact.Densities[report];
            // Distances on the halved grid carry four times the error of the full grid, hence a third of the difference (Richardson).
            var gridError = truth is not null && onHalf is not null && DensityDistance.Between(onHalf[report], truth, team) is { } bracket
                ? bracket.Distance * ExactFlowYardstick.RichardsonShare
                : (double?)null;
            gridErrors.Add(gridError);
            foreach (var track in flows)
            {
                if (!track.Shown || track.Failed)
                    continue;
                series.Add(FlowRow(track, track.Densities[report], time, truth));
            }

            var noise = new Dictionary<string, NoiseFloor?>();
            foreach (var track in ensembles)
            {
                if (track.Failed || cancellation.IsCancellationRequested)
                    continue;
                MeasureEnsemble(track, report, time, truth, gridError, noise, cancellation);
            }
        }

        private SeriesRow FlowRow(FlowTrack track, Density density, double time, Density? truth)
        {
            var own = ReferenceEquals(track, exact);
            TransportBracket? toExact = truth is null ? null
                : own ? TransportBracket.Exact(0)
                : DensityDistance.Between(density, truth, team);
            double? variation = truth is null ? null : own ? 0 : TotalVariation.Between(density, truth);
            // Infinite beside empty cells: the quantity does not exist there, and the cell of the table stays empty.
            var fisher = FisherInformation.Of(generator, density.Values);
            return new SeriesRow(time, track.Scheme.Traits.Name, SeriesKind.Flow, MomentMeasure.Of(density),
                problem.Entropy(density.Values), problem.FreeEnergy(density.Values), problem.RelativeEntropy(density.Values),
                double.IsFinite(fisher) ? fisher : null, toExact, variation,
                plane ? null : DensityDistance.Between(density, problem.Equilibrium, team));
        }

        private void MeasureEnsemble(
            EnsembleTrack track, int report, double time, Density? truth, double? gridError, Dictionary<string, NoiseFloor?> noise, CancellationToken cancellation)
        {
            var name = track.Sampler.Traits.Name;
            var total = truth is null ? null : SampleDistance.Between(track.Run.X, track.Run.Y, truth, team);
            series.Add(new SeriesRow(time, name, SeriesKind.Ensemble, MomentMeasure.OfSamples(track.Run.X, track.Run.Y),
                null, null, null, null, total, null,
                plane ? null : SampleDistance.Between(track.Run.X, track.Run.Y, problem.Equilibrium, team)));
            if (truth is null)
                return;
            var law = track.Law is { Failed: false } lawTrack ? lawTrack.Densities[report] : null;
            double? bias = law is null ? null : ReferenceEquals(track.Law, exact) ? 0 : DensityDistance.Between(law, truth, team)?.Distance;
            var floor = Floor("exact", truth);
            if (total is not { } distance || floor is null)
            {
                budget.Add(new BudgetRow(time, name, total?.Distance, bias, null, null, gridError, null, "not measured"));
                return;
            }

            var pValue = floor.PValue(distance.Distance);
            double? lawP = null;
            double? toLaw = null;
            // The second simulation is worth its time only where the first question was answered with no.
            if (law is not null && pValue < NoticedLevel && Floor(track.Law!.Scheme.Traits.Name, law) is { } lawFloor)
            {
                toLaw = SampleDistance.Between(track.Run.X, track.Run.Y, law, team)?.Distance;
                lawP = toLaw is { } found ? lawFloor.PValue(found) : null;
            }

            budget.Add(new BudgetRow(time, name, distance.Distance, bias, floor.Mean, floor.Percentile95, gridError, pValue,
                Verdict(pValue, lawP, bias, toLaw, floor.Percentile95, floor.Mean, distance.Distance, gridError)));

            NoiseFloor? Floor(string key, Density density)
            {
                if (!noise.TryGetValue(key, out var found))
                {
                    found = NoiseFloor.Simulate(density, options.Walkers, options.NoiseDraws, options.Seed + (ulong)report, team, cancellation);
                    noise[key] = found;
                }

                return found;
            }
        }

        // Bounds of methods that are shown; they are a help to the reader, and an interrupt just leaves them out.
        public IReadOnlyList<BoundCurve> Bounds(CancellationToken cancellation)
        {
            try
            {
                return [.. ErrorBounds.Of(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), plan, team, cancellation)
                    .Where(bound => flows.Exists(track => track.Shown && track.Scheme.Traits.Name == bound.Method))];
            }
            catch (OperationCanceledException)
            {
                return [];
            }
        }

        public ComparisonResult Result(bool interrupted)
        {
            var whole = gridErrors.Count;
            var reached = whole == 0 ? -1 : plan.ReportTimes[whole - 1];
            foreach (var track in ensembles)
            {
                if (track.AcceptanceCount > 0)
                {
                    remarks.Add(new Remark(track.Sampler.Traits.Name, null,
                        FormattableString.Invariant($"{100 * track.AcceptanceSum / track.AcceptanceCount:f1} % of the proposals were accepted."), false));
                }
            }

            if (interrupted)
                remarks.Add(new Remark(null, whole == 0 ? null : reached, "The run was interrupted; everything up to this time is complete.", true));
            return new ComparisonResult
            {
                Problem = problem.Problem,
                Grid = problem.Grid,
                Plan = plan,
                Equilibrium = problem.Equilibrium,
                EquilibriumFreeEnergy = problem.EquilibriumFreeEnergy,
                Series = series,
                Steps = [.. flows.Where(track => track.Shown).SelectMany(track => track.Steps)],
                Budget = budget,
                GridErrors = gridErrors,
                Densities = [.. flows.Where(track => track.Shown).Select(track => new DensityHistory(track.Scheme.Traits.Name, Cut(track.Densities, whole)))],
                Walkers = [.. ensembles.Select(track => new WalkerHistory(track.Sampler.Traits.Name, Cut(track.KeptX, whole), Cut(track.KeptY, whole)))],
                Remarks = remarks,
                Work =
                [
                    .. flows.Select(track => new WorkRow(
                        track.Shown ? track.Scheme.Traits.Name : $"{track.Scheme.Traits.Name} (not listed)", track.Run.StepsTaken, track.Iterations, track.Clock.Elapsed.TotalSeconds)),
                    .. ensembles.Select(track => new WorkRow(track.Sampler.Traits.Name, track.Run.StepsTaken, 0, track.Clock.Elapsed.TotalSeconds)),
                    new WorkRow("distances and noise", gridErrors.Count, 0, measuring.Elapsed.TotalSeconds),
                ],
                Estimators = Estimators(),
                WalkerCount = ensembles.Count > 0 ? options.Walkers : 0,
                Seed = options.Seed,
                Threads = team.Size,
                Interrupted = interrupted,
            };
        }

        private static List<T> Cut<T>(List<T> list, int count) => list.Count > count ? list.GetRange(0, count) : list;

        private Dictionary<string, string> Estimators() => new(StringComparer.Ordinal)
        {
            ["entropy, free_energy, relative_entropy of ensembles"] = "Not estimated from walkers; the cells are empty.",
            ["grid_w2"] = "A third of W2 between the exact flow and the exact flow on half the cells (Richardson extrapolation at second order).",
            ["noise_w2_mean, noise_w2_p95, p_value"] = FormattableString.Invariant(
                $"{options.NoiseDraws} simulated ensembles of {options.Walkers} independent draws of the exact flow, measured as the walkers are; add-one rule (B. Phipson, G. Smyth, Stat. Appl. Genet. Mol. Biol. 9 (2010) 39)."),
            ["step_bias_w2"] = "W2 between the sampler's law, advanced on the same grid by the splitting scheme of the same recipe, and the exact flow.",
            ["w2_exact"] = plane
                ? "Quadratic Wasserstein distance in the plane with lower and upper bound."
                : "Quadratic Wasserstein distance by quantile functions, exact for densities constant in each cell.",
        };

        public void Dispose()
        {
            foreach (var track in flows)
                track.Run.Dispose();
        }
    }
}
