using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// The unadjusted Langevin algorithm with an inexact gradient: X′ = X − Mτ(∇V(X) + b + s ζ) + √(2MTτ) ξ, b a constant error, ζ standard normal
/// numbers, new at each step and on each axis.
/// </summary>
/// <remarks>
/// The two noises add to one of variance 2MTτ + (Mτs)² and are drawn as one. Its law is that of ULA with V + b·x and T + Mτs²/2 in the noise: the error's
/// variance heats by a share that falls with the step. Source: A. Dalalyan, A. Karagulyan, Stoch. Proc. Appl. 129 (2019) 5278-5311, for gradients with bias
/// and variance.
/// </remarks>
public sealed class NoisyGradientLangevin : Sampler
{
    private readonly double biasX;
    private readonly double biasY;
    private readonly double variance;

    /// <summary>Makes the sampler.</summary>
    /// <param name="biasX">b on the x axis, in units of energy per length.</param>
    /// <param name="biasY">b on the y axis; not used in one dimension.</param>
    /// <param name="variance">s² on each axis, in units of (energy per length)², not below 0.</param>
    public NoisyGradientLangevin(double biasX = 0, double biasY = 0, double variance = 1)
    {
        this.biasX = Require.Finite(biasX);
        this.biasY = Require.Finite(biasY);
        this.variance = Require.NotNegative(variance);
        Traits = new(
            "ula-noisy-gradient", "Unadjusted Langevin with a gradient that is wrong by a constant and by chance.",
            new NoisyGradientScheme(biasX, biasY, variance), 1, "A. Dalalyan, A. Karagulyan, Stoch. Proc. Appl. 129 (2019) 5278-5311");
    }

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; }

    /// <inheritdoc/>
    /// <exception cref="InputException">V has a jump, or the start cannot be drawn.</exception>
    public override EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        RecipeSampler.RefuseJumps(problem, Traits.Name);
        return new Run(this, problem, walkers, seed, team);
    }

    private sealed class Run : TiledRun
    {
        private readonly NoisyGradientLangevin sampler;
        private readonly BlowUpWatch watch;
        private double time;
        private double deviation;

        public Run(NoisyGradientLangevin sampler, Problem problem, int walkers, ulong seed, WorkerTeam team)
            : base(problem, walkers, seed, team)
        {
            this.sampler = sampler;
            watch = new BlowUpWatch(problem, problem.Potential.IsSmooth ? CurvatureSurvey.Of(problem.Potential, problem.Domain) : null);
        }

        protected override EnsembleReport AdvanceCore(double step)
        {
            time = Problem.Mobility * step;
            deviation = Math.Sqrt(2 * Problem.Temperature * time + time * time * sampler.variance);
            var (failure, warning) = watch.Judge(RunTiles(), StepsTaken + 1, step, time, X, Y);
            return new EnsembleReport(failure, warning);
        }

        protected override void AdvanceTile(int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome)
            => ExplicitStep(time, sampler.biasX, sampler.biasY, deviation, first, count, x, y, compare, ref outcome);
    }

    // V + b·x.
    private sealed class TiltedPotential(Potential potential, double biasX, double biasY) : Potential
    {
        public override int Dimension => potential.Dimension;

        public override string Description => potential.Description;

        public override bool IsSmooth => potential.IsSmooth;

        public override PotentialForm? Form => potential.Form is QuadraticForm form
            ? form with { GradientX = form.GradientX + biasX, GradientY = form.GradientY + biasY }
            : null;

        public override IReadOnlyList<Kink> FindKinks(Interval interval)
            => [.. potential.FindKinks(interval).Select(kink => kink with { SlopeBefore = kink.SlopeBefore + biasX, SlopeAfter = kink.SlopeAfter + biasX })];

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            potential.Value(x, y, value);
            SpanKernels.AddScaled(value, biasX, x);
            if (Dimension == 2)
                SpanKernels.AddScaled(value, biasY, y);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            potential.Gradient(x, y, gradientX, gradientY);
            Add(gradientX, biasX);
            Add(gradientY, biasY);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            potential.Jet(x, y, target);
            SpanKernels.AddScaled(target.Value, biasX, x);
            if (Dimension == 2)
                SpanKernels.AddScaled(target.Value, biasY, y);
            Add(target.GradientX, biasX);
            Add(target.GradientY, biasY);
        }

        private static void Add(Span<double> values, double constant)
        {
            for (var i = 0; i < values.Length; i++)
                values[i] += constant;
        }
    }

    private sealed class NoisyGradientScheme(double biasX, double biasY, double variance) : FlowScheme
    {
        public override SchemeTraits Traits { get; } = SplittingScheme.Gradient.Traits with
        {
            Name = "split-gradient-noisy",
            Summary = "Explicit step on an inexact gradient, then heat: the law of ULA with that gradient.",
        };

        protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team)
            => new NoisyGradientRun(biasX, biasY, variance, problem, start, team);
    }

    // The temperature of the noise depends on the step: a new step length goes on from the density of the old one.
    private sealed class NoisyGradientRun(double biasX, double biasY, double variance, GridProblem problem, Density start, WorkerTeam team) : FlowRun(problem, team)
    {
        private readonly TiltedPotential tilted = new(problem.Problem.Potential, biasX, biasY);
        private FlowRun? inner;
        private double lastStep;

        public override void WriteDensity(Span<double> destination)
        {
            if (inner is null)
                start.Values.CopyTo(destination);
            else
                inner.WriteDensity(destination);
        }

        protected override StepReport AdvanceCore(double step)
        {
            if (inner is null || step != lastStep)
            {
                var given = Problem.Problem;
                var heated = given with { Potential = tilted, Temperature = given.Temperature + 0.5 * given.Mobility * step * variance };
                var from = inner?.Snapshot() ?? start;
                inner?.Dispose();
                inner = SplittingScheme.Gradient.Begin(new GridProblem(heated, Problem.Grid), from, Team);
                lastStep = step;
            }

            return inner.Advance(step);
        }

        protected override void Dispose(bool disposing)
        {
            if (disposing)
                inner?.Dispose();
            base.Dispose(disposing);
        }
    }
}
