using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// Walkers advanced tile by tile: a tile is small enough for its random bits, normal numbers, gradients and positions to stay in the first-level
/// cache while a step is made of short loops. Tiles are gathered into blocks, and blocks are shared out among threads.
/// </summary>
/// <remarks>
/// Number i of a step's noise belongs to walker i, and tiles begin at multiples of 512, so that a walker's path depends on the seed alone as long as
/// the potential gives the same value at any place in a span.
/// </remarks>
internal abstract class TiledRun : EnsembleRun
{
    /// <summary>Walkers of a tile; a multiple of 16.</summary>
    protected const int TileLength = 512;

    private readonly int tilesInBlock;
    private readonly BlockOutcome[] outcomes;
    private readonly Action<int> blockJob;

    protected TiledRun(Problem problem, int walkers, ulong seed, WorkerTeam team, int tilesInBlock = 32)
        : base(problem, walkers, team)
    {
        Seed = seed;
        this.tilesInBlock = tilesInBlock;
        StartDraws.Fill(problem.Start, problem.Domain, seed, WalkersX, WalkersY, team);
        var tiles = (walkers + TileLength - 1) / TileLength;
        outcomes = new BlockOutcome[(tiles + tilesInBlock - 1) / tilesInBlock];
        blockJob = RunBlock;
        FoldX = new AxisFold(problem.Domain.X);
        FoldY = new AxisFold(problem.Domain.Y ?? problem.Domain.X);
    }

    protected ulong Seed { get; }

    /// <summary>Number of the step in the streams of random numbers.</summary>
    protected virtual uint StreamStep => checked((uint)StepsTaken);

    protected AxisFold FoldX { get; }

    protected AxisFold FoldY { get; }

    protected bool IsPlane => Problem.Dimension == 2;

    /// <summary>Runs one step on all tiles; what the blocks saw, in order.</summary>
    protected ReadOnlySpan<BlockOutcome> RunTiles()
    {
        Team.Run(outcomes.Length, blockJob);
        return outcomes;
    }

    /// <summary>Advances one tile.</summary>
    /// <param name="first">Index of its first walker.</param>
    /// <param name="count">Walkers in it.</param>
    /// <param name="x">First coordinates, padded to a multiple of 16 by copies of the last walker, whose outcome is thrown away.</param>
    /// <param name="y">Second coordinates; empty in one dimension.</param>
    /// <param name="compare">Whether energies before and after the deterministic part are to be compared.</param>
    /// <param name="outcome">What was seen is added here.</param>
    protected abstract void AdvanceTile(int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome);

    [SkipLocalsInit]
    private void RunBlock(int block)
    {
        var outcome = default(BlockOutcome);
        var firstTile = block * tilesInBlock;
        var tiles = Math.Min(tilesInBlock, (Count + TileLength - 1) / TileLength - firstTile);
        // About eight tiles are compared in a step, however many blocks there are.
        var comparing = (block + StepsTaken) % Math.Max(1, outcomes.Length / 8) == 0;
        Span<double> paddedX = stackalloc double[TileLength];
        Span<double> paddedY = stackalloc double[TileLength];
        for (var tile = 0; tile < tiles; tile++)
        {
            var first = (firstTile + tile) * TileLength;
            var count = Math.Min(TileLength, Count - first);
            var compare = comparing && tile == StepsTaken % tiles;
            if (count % 16 == 0)
            {
                AdvanceTile(first, count, WalkersX.Slice(first, count), IsPlane ? WalkersY.Slice(first, count) : [], compare, ref outcome);
                continue;
            }

            var length = (count + 15) & ~15;
            var x = Pad(WalkersX.Slice(first, count), paddedX[..length]);
            var y = IsPlane ? Pad(WalkersY.Slice(first, count), paddedY[..length]) : [];
            AdvanceTile(first, count, x, y, compare, ref outcome);
            x[..count].CopyTo(WalkersX[first..]);
            if (IsPlane)
                y[..count].CopyTo(WalkersY[first..]);
        }

        outcomes[block] = outcome;
    }

    private static Span<double> Pad(Span<double> source, Span<double> target)
    {
        source.CopyTo(target);
        target[source.Length..].Fill(source[^1]);
        return target;
    }

    /// <summary>
    /// x ← fold(x − t·gradient + deviation·ξ), ξ the standard normal numbers of this step. A walker whose move t·gradient is not finite or longer than
    /// the domain stays where it is and is counted.
    /// </summary>
    /// <param name="fold">The axis.</param>
    /// <param name="time">t.</param>
    /// <param name="gradient">Gradient along the axis.</param>
    /// <param name="deviation">Deviation of the noise; 0 for a move without noise.</param>
    /// <param name="purpose">Purpose of the noise.</param>
    /// <param name="x">Walkers.</param>
    /// <param name="first">Index of the first walker.</param>
    /// <param name="count">Walkers that are not padding.</param>
    /// <param name="outcome">Receives what was seen.</param>
    protected void Move(
        in AxisFold fold, double time, ReadOnlySpan<double> gradient, double deviation, uint purpose, Span<double> x, int first, int count,
        ref BlockOutcome outcome)
    {
        if (!(time * LargestMagnitude(gradient) <= fold.LargestMove))
        {
            MoveCarefully(fold, time, gradient, deviation, purpose, x, first, count, ref outcome);
            return;
        }

        ref var positions = ref MemoryMarshal.GetReference(x);
        ref var gradients = ref MemoryMarshal.GetReference(gradient);
        var minusTime = Vector512.Create(-time);
        if (deviation > 0)
        {
            Transform(purpose, first, x.Length, deviation, new DriftAndNoise(ref positions, ref gradients, minusTime));
        }
        else
        {
            for (nuint i = 0; i < (nuint)x.Length; i += 8)
                Vector512.FusedMultiplyAdd(minusTime, Vector512.LoadUnsafe(ref gradients, i), Vector512.LoadUnsafe(ref positions, i)).StoreUnsafe(ref positions, i);
        }

        fold.FoldInPlace(x);
    }

    /// <summary>One explicit step of a tile: x ← fold(x − t(∇V + bias) + deviation·ξ).</summary>
    [SkipLocalsInit]
    protected void ExplicitStep(
        double time, double biasX, double biasY, double deviation, int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome)
    {
        var storage = AlignedScratch.Of(stackalloc double[2 * TileLength + AlignedScratch.Slack], 2 * TileLength);
        var gradientX = storage[..x.Length];
        var gradientY = IsPlane ? storage.Slice(TileLength, x.Length) : [];
        Problem.Potential.Gradient(x, y, gradientX, gradientY);
        Shift(gradientX, biasX);
        Shift(gradientY, biasY);
        if (compare)
            CompareEnergies(time, count, x, y, gradientX, gradientY, ref outcome);
        Move(FoldX, time, gradientX, deviation, StreamPurpose.Noise, x, first, count, ref outcome);
        if (IsPlane)
            Move(FoldY, time, gradientY, deviation, StreamPurpose.Noise + 1, y, first, count, ref outcome);
    }

    private static void Shift(Span<double> values, double constant)
    {
        if (constant == 0)
            return;
        ref var source = ref MemoryMarshal.GetReference(values);
        for (nuint i = 0; i < (nuint)values.Length; i += 8)
            (Vector512.LoadUnsafe(ref source, i) + Vector512.Create(constant)).StoreUnsafe(ref source, i);
    }

    /// <summary>x ← fold(x + deviation·ξ), ξ the standard normal numbers of this step.</summary>
    protected void AddNoise(in AxisFold fold, double deviation, uint purpose, int first, Span<double> x)
    {
        Transform(purpose, first, x.Length, deviation, new Noise(ref MemoryMarshal.GetReference(x)));
        fold.FoldInPlace(x);
    }

    /// <summary>Standard normal numbers of this step for the walkers from <paramref name="first"/> on.</summary>
    protected void DrawNormals(uint purpose, int first, Span<double> target)
        => new NormalDraws(Seed, purpose, StreamStep).Fill((ulong)first, target);

    // Hands a tile's normal numbers to what uses them in the loop that makes them: a third of the time of writing and reading them is saved.
    [SkipLocalsInit]
    private void Transform<TSink>(uint purpose, int first, int length, double deviation, TSink sink)
        where TSink : INormalSink, allows ref struct
    {
        var words = AlignedScratch.Of(stackalloc ulong[TileLength / 2 + AlignedScratch.Slack], TileLength / 2);
        ref var bits = ref MemoryMarshal.GetReference(words);
        var key = new StreamKey(Seed, purpose, StreamStep);
        Philox.Fill((ulong)first / 4, key.HighHalf, key.Seed, ref bits, (length / 2 + 15) & ~15);
        NormalPairs.Run(ref bits, length / 2, deviation, sink);
    }

    private readonly ref struct Noise(ref double x) : INormalSink
    {
        private readonly ref double x = ref x;

        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public void Take(nuint place, Vector512<double> radius, Vector512<double> share)
            => Vector512.FusedMultiplyAdd(radius, share, Vector512.LoadUnsafe(ref x, place)).StoreUnsafe(ref x, place);
    }

    private readonly ref struct DriftAndNoise(ref double x, ref double gradient, Vector512<double> minusTime) : INormalSink
    {
        private readonly ref double x = ref x;
        private readonly ref double gradient = ref gradient;

        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public void Take(nuint place, Vector512<double> radius, Vector512<double> share)
        {
            var drifted = Vector512.FusedMultiplyAdd(minusTime, Vector512.LoadUnsafe(ref gradient, place), Vector512.LoadUnsafe(ref x, place));
            Vector512.FusedMultiplyAdd(radius, share, drifted).StoreUnsafe(ref x, place);
        }
    }

    /// <summary>The largest |value|, NaN when there is any: without signs, the bits of doubles are in the order of their values, with NaN at the top.</summary>
    protected static double LargestMagnitude(ReadOnlySpan<double> values)
    {
        ref var source = ref MemoryMarshal.GetReference(values);
        var magnitude = Vector512.Create(long.MaxValue);
        var largest = Vector512<long>.Zero;
        var largestToo = Vector512<long>.Zero;
        // Tiles are multiples of 16 long.
        for (nuint i = 0; i < (nuint)values.Length; i += 16)
        {
            largest = Vector512.Max(largest, Vector512.LoadUnsafe(ref source, i).AsInt64() & magnitude);
            largestToo = Vector512.Max(largestToo, Vector512.LoadUnsafe(ref source, i + 8).AsInt64() & magnitude);
        }

        largest = Vector512.Max(largest, largestToo);
        var half = Vector256.Max(largest.GetLower(), largest.GetUpper());
        var quarter = Vector128.Max(half.GetLower(), half.GetUpper());
        return BitConverter.Int64BitsToDouble(Math.Max(quarter[0], quarter[1]));
    }

    [SkipLocalsInit]
    private void MoveCarefully(
        in AxisFold fold, double time, ReadOnlySpan<double> gradient, double deviation, uint purpose, Span<double> x, int first, int count,
        ref BlockOutcome outcome)
    {
        Span<double> before = stackalloc double[TileLength];
        x.CopyTo(before);
        if (deviation > 0)
            AddNoise(fold, deviation, purpose, first, x);
        for (var i = 0; i < x.Length; i++)
        {
            if (Math.Abs(time * gradient[i]) <= fold.LargestMove)
            {
                x[i] = Math.FusedMultiplyAdd(-time, gradient[i], x[i]);
                continue;
            }

            x[i] = before[i];
            if (i >= count)
                continue;
            if (outcome.Thrown == 0 || first + i < outcome.FirstThrown)
                outcome.FirstThrown = first + i;
            outcome.Thrown++;
        }

        fold.FoldInPlace(x);
    }

    /// <summary>Compares V at the walkers with V where −t∇V alone would take them.</summary>
    [SkipLocalsInit]
    protected void CompareEnergies(
        double time, int count, ReadOnlySpan<double> x, ReadOnlySpan<double> y, ReadOnlySpan<double> gradientX, ReadOnlySpan<double> gradientY, ref BlockOutcome outcome)
    {
        Span<double> storage = stackalloc double[4 * TileLength];
        var length = x.Length;
        var movedX = storage[..length];
        var movedY = IsPlane ? storage.Slice(TileLength, length) : [];
        var before = storage.Slice(2 * TileLength, length);
        var after = storage.Slice(3 * TileLength, length);
        x.CopyTo(movedX);
        SpanKernels.AddScaled(movedX, -time, gradientX);
        if (IsPlane)
        {
            y.CopyTo(movedY);
            SpanKernels.AddScaled(movedY, -time, gradientY);
        }


        Problem.Potential.Value(x, y, before);
        Problem.Potential.Value(movedX, movedY, after);
        for (var i = 0; i < count; i++)
        {
            var change = after[i] - before[i];
            // Beyond a wall V may not be defined: such a walker says nothing.
            if (!double.IsFinite(change))
                continue;
            outcome.Compared++;
            outcome.EnergyChange += change;
            outcome.EnergyChangeSquared += change * change;
        }
    }
}
