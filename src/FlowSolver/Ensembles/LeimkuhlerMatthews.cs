using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The Leimkuhler-Matthews method: Xₙ₊₁ = Xₙ − Mτ∇V(Xₙ) + √(2MTτ)(ξₙ + ξₙ₊₁)/2, each noise used in two steps.
/// </summary>
/// <remarks>
/// Bias of the long-time law of second order in τ at the cost of ULA; exact on quadratics (Mτλ &lt; 2). Before the start has been forgotten it is of first order.
/// Two steps share a noise, so that the walkers' positions alone are no Markov chain and no scheme on the grid carries their law: the step bias cannot be told
/// apart. At a wall the noise that is carried over is reflected with the walker. Source: B. Leimkuhler, C. Matthews, Appl. Math. Res. Express 2013, 34-56;
/// reflection is a departure.
/// </remarks>
public sealed class LeimkuhlerMatthews : Sampler
{
    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "leimkuhler-matthews", "Explicit gradient step with the mean of two successive noises.", null, 2,
        "B. Leimkuhler, C. Matthews, Appl. Math. Res. Express 2013, 34-56");

    /// <inheritdoc/>
    /// <exception cref="InputException">V has a jump, or the start cannot be drawn.</exception>
    public override EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        RecipeSampler.RefuseJumps(problem, Traits.Name);
        return new Run(problem, walkers, seed, team);
    }

    private sealed class Run : TiledRun
    {
        // Purpose of the noise before the first step: that of a part that no recipe has.
        private const uint FirstNoise = StreamPurpose.Noise + 30;
        private readonly BlowUpWatch watch;
        private readonly double[] storageX;
        private readonly double[] storageY;
        private readonly int offsetX;
        private readonly int offsetY;
        private double time;
        private double halfDeviation;

        public Run(Problem problem, int walkers, ulong seed, WorkerTeam team)
            : base(problem, walkers, seed, team)
        {
            watch = new BlowUpWatch(problem, problem.Potential.IsSmooth ? CurvatureSurvey.Of(problem.Potential, problem.Domain) : null);
            var padded = (walkers + 15) & ~15;
            (storageX, offsetX) = AlignedArray(padded);
            new NormalDraws(seed, FirstNoise).Fill(0, storageX.AsSpan(offsetX, padded));
            (storageY, offsetY) = problem.Dimension == 2 ? AlignedArray(padded) : ([], 0);
            if (problem.Dimension == 2)
                new NormalDraws(seed, FirstNoise + 1).Fill(0, storageY.AsSpan(offsetY, padded));
        }

        protected override EnsembleReport AdvanceCore(double step)
        {
            time = Problem.Mobility * step;
            halfDeviation = 0.5 * Math.Sqrt(2 * Problem.Temperature * time);
            var (failure, warning) = watch.Judge(RunTiles(), StepsTaken + 1, step, time, X, Y);
            return new EnsembleReport(failure, warning);
        }

        [SkipLocalsInit]
        protected override void AdvanceTile(int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome)
        {
            var storage = AlignedScratch.Of(stackalloc double[2 * TileLength + AlignedScratch.Slack], 2 * TileLength);
            var gradientX = storage[..x.Length];
            var gradientY = IsPlane ? storage.Slice(TileLength, x.Length) : [];
            Problem.Potential.Gradient(x, y, gradientX, gradientY);
            if (compare)
                CompareEnergies(time, count, x, y, gradientX, gradientY, ref outcome);
            Axis(FoldX, Problem.Domain.X, StreamPurpose.Noise, gradientX, storageX.AsSpan(offsetX + first, x.Length), x, first, count, ref outcome);
            if (IsPlane)
                Axis(FoldY, Problem.Domain.Y!, StreamPurpose.Noise + 1, gradientY, storageY.AsSpan(offsetY + first, x.Length), y, first, count, ref outcome);
        }

        private void Axis(
            in AxisFold fold, Interval interval, uint purpose, Span<double> gradient, Span<double> noise, Span<double> x, int first, int count, ref BlockOutcome outcome)
        {
            if (!(time * LargestMagnitude(gradient) <= fold.LargestMove))
            {
                for (var i = 0; i < x.Length; i++)
                {
                    if (Math.Abs(time * gradient[i]) <= fold.LargestMove)
                        continue;
                    gradient[i] = 0;
                    if (i >= count)
                        continue;
                    if (outcome.Thrown == 0 || first + i < outcome.FirstThrown)
                        outcome.FirstThrown = first + i;
                    outcome.Thrown++;
                }
            }

            Push(time, gradient, halfDeviation, noise, x);
            DrawNormals(purpose, first, noise);
            AddScaled(halfDeviation, noise, x);
            if (interval.Ends == AxisEnds.Reflecting && !fold.HoldsAll(x))
            {
                for (var i = 0; i < x.Length; i++)
                {
                    if (x[i] < interval.From || x[i] > interval.To)
                        noise[i] = Math.Abs(Math.Floor((x[i] - interval.From) / interval.Length)) % 2 == 1 ? -noise[i] : noise[i];
                }
            }

            fold.FoldInPlace(x);
        }

        private static void Push(double time, ReadOnlySpan<double> gradient, double scale, ReadOnlySpan<double> noise, Span<double> x)
        {
            ref var positions = ref MemoryMarshal.GetReference(x);
            ref var gradients = ref MemoryMarshal.GetReference(gradient);
            ref var noises = ref MemoryMarshal.GetReference(noise);
            for (nuint i = 0; i < (nuint)x.Length; i += 8)
            {
                var moved = Vector512.FusedMultiplyAdd(Vector512.Create(-time), Vector512.LoadUnsafe(ref gradients, i), Vector512.LoadUnsafe(ref positions, i));
                Vector512.FusedMultiplyAdd(Vector512.Create(scale), Vector512.LoadUnsafe(ref noises, i), moved).StoreUnsafe(ref positions, i);
            }
        }

        private static void AddScaled(double scale, ReadOnlySpan<double> noise, Span<double> x)
        {
            ref var positions = ref MemoryMarshal.GetReference(x);
            ref var noises = ref MemoryMarshal.GetReference(noise);
            for (nuint i = 0; i < (nuint)x.Length; i += 8)
                Vector512.FusedMultiplyAdd(Vector512.Create(scale), Vector512.LoadUnsafe(ref noises, i), Vector512.LoadUnsafe(ref positions, i)).StoreUnsafe(ref positions, i);
        }
    }
}
