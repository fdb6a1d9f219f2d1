using System.Runtime.CompilerServices;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// The unadjusted Langevin algorithm with decreasing steps: step n (from 0) of length τ is taken in mₙ = ⌊(1 + n/n₀)^α⌋ equal parts, so that the times of
/// the plan are kept while the steps shrink like n^(−α).
/// </summary>
/// <remarks>
/// The bias falls with the steps instead of staying, at a cost that grows like n^α. Other than that as <see cref="UnadjustedLangevin"/>. Source: A. Durmus,
/// É. Moulines, Bernoulli 25 (2019) 2854-2882, theorem 5, for steps that never grow; parts of equal length between the times of a plan are a departure.
/// </remarks>
public sealed class DecreasingStepLangevin : Sampler
{
    private readonly StepParts parts;

    /// <summary>Makes the sampler.</summary>
    /// <param name="stepsBeforeDecrease">n₀, above 0.</param>
    /// <param name="exponent">α, above 0 and at most 1.</param>
    public DecreasingStepLangevin(double stepsBeforeDecrease = 10, double exponent = 0.5)
    {
        Require.Positive(stepsBeforeDecrease);
        Require.That(exponent is > 0 and <= 1, $"The exponent was {exponent}; it must be above 0 and at most 1.");
        parts = new StepParts(stepsBeforeDecrease, exponent);
        Traits = new(
            "ula-decreasing", "Unadjusted Langevin with steps that shrink as they go on.", new DecreasingStepScheme(parts), 1,
            "A. Durmus, É. Moulines, Bernoulli 25 (2019) 2854-2882");
    }

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; }

    /// <summary>mₙ, the number of parts of step <paramref name="step"/>, counted from 0.</summary>
    public int PartsOf(int step) => parts.Of(step);

    /// <inheritdoc/>
    /// <exception cref="InputException">V has a jump, or the start cannot be drawn.</exception>
    public override EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        RecipeSampler.RefuseJumps(problem, Traits.Name);
        return new Run(parts, problem, walkers, seed, team);
    }

    private sealed record StepParts(double StepsBeforeDecrease, double Exponent)
    {
        public int Of(int step) => (int)Math.Floor(Math.Pow(1 + step / StepsBeforeDecrease, Exponent) * (1 + 1e-12));
    }

    private sealed class Run : TiledRun
    {
        private readonly StepParts parts;
        private readonly BlowUpWatch watch;
        private double time;
        private double deviation;
        private uint partsTaken;

        public Run(StepParts parts, Problem problem, int walkers, ulong seed, WorkerTeam team)
            : base(problem, walkers, seed, team)
        {
            this.parts = parts;
            watch = new BlowUpWatch(problem, problem.Potential.IsSmooth ? CurvatureSurvey.Of(problem.Potential, problem.Domain) : null);
        }

        protected override uint StreamStep => partsTaken;

        protected override EnsembleReport AdvanceCore(double step)
        {
            var count = parts.Of(StepsTaken);
            time = Problem.Mobility * step / count;
            deviation = Math.Sqrt(2 * Problem.Temperature * time);
            string? warned = null;
            for (var part = 0; part < count; part++)
            {
                var (failure, warning) = watch.Judge(RunTiles(), StepsTaken + 1, step / count, time, X, Y);
                partsTaken++;
                warned ??= warning;
                if (failure is not null)
                    return new EnsembleReport(failure, warned);
            }

            return new EnsembleReport(null, warned);
        }

        [SkipLocalsInit]
        protected override void AdvanceTile(int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome)
            => ExplicitStep(time, 0, 0, deviation, first, count, x, y, compare, ref outcome);
    }

    private sealed class DecreasingStepScheme(StepParts parts) : FlowScheme
    {
        public override SchemeTraits Traits { get; } = SplittingScheme.Gradient.Traits with
        {
            Name = "split-gradient-decreasing",
            Summary = "Explicit gradient steps and heat, shrinking as they go on: the law of ULA with decreasing steps.",
        };

        protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team)
            => new DecreasingStepRun(parts, problem, SplittingScheme.Gradient.Begin(problem, start, team), team);
    }

    private sealed class DecreasingStepRun(StepParts parts, GridProblem problem, FlowRun inner, WorkerTeam team) : FlowRun(problem, team)
    {
        public override void WriteDensity(Span<double> destination) => inner.WriteDensity(destination);

        protected override StepReport AdvanceCore(double step)
        {
            var count = parts.Of(StepsTaken);
            var iterations = 0;
            string? failure = null, warning = null;
            for (var part = 0; part < count && failure is null; part++)
            {
                var report = inner.Advance(step / count);
                iterations += report.Iterations;
                failure = report.Failure;
                warning ??= report.Warning;
            }

            return new StepReport(iterations, Failure: failure, Warning: warning);
        }

        protected override void Dispose(bool disposing)
        {
            if (disposing)
                inner.Dispose();
            base.Dispose(disposing);
        }
    }
}
