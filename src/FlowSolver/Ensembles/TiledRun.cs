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
        var tiles = Math.Min(tilesInBlock, (WalkersX.Length + TileLength - 1) / TileLength - firstTile);
        Span<double> paddedX = stackalloc double[TileLength];
        Span<double> paddedY = stackalloc double[TileLength];
        for (var tile = 0; tile < tiles; tile++)
        {
            var first = (firstTile + tile) * TileLength;
            var count = Math.Min(TileLength, WalkersX.Length - first);
            var compare = tile == StepsTaken % tiles;
            if (count % 16 == 0)
            {
                AdvanceTile(first, count, WalkersX.AsSpan(first, count), IsPlane ? WalkersY.AsSpan(first, count) : [], compare, ref outcome);
                continue;
            }

            var length = (count + 15) & ~15;
            var x = Pad(WalkersX.AsSpan(first, count), paddedX[..length]);
            var y = IsPlane ? Pad(WalkersY.AsSpan(first, count), paddedY[..length]) : [];
            AdvanceTile(first, count, x, y, compare, ref outcome);
            x[..count].CopyTo(WalkersX.AsSpan(first));
            if (IsPlane)
                y[..count].CopyTo(WalkersY.AsSpan(first));
        }

        outcomes[block] = outcome;
    }

    private static Span<double> Pad(Span<double> source, Span<double> target)
    {
        source.CopyTo(target);
        target[source.Length..].Fill(source[^1]);
        return target;
    }

    /// <summary>x ← fold(x − t·gradient + deviation·noise); a walker whose move is too long or not finite stays. True when there is any.</summary>
    protected static bool MoveWithNoise(
        AxisFold fold, double time, ReadOnlySpan<double> gradient, double deviation, ReadOnlySpan<double> noise, Span<double> x)
    {
        ref var positions = ref MemoryMarshal.GetReference(x);
        ref var gradients = ref MemoryMarshal.GetReference(gradient);
        ref var noises = ref MemoryMarshal.GetReference(noise);
        var allGood = Vector512<long>.AllBitsSet;
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var position = Vector512.LoadUnsafe(ref positions, i);
            var move = Vector512.Create(time) * Vector512.LoadUnsafe(ref gradients, i);
            var good = Vector512.LessThanOrEqual(Vector512.Abs(move), Vector512.Create(fold.LargestMove));
            var target = Vector512.FusedMultiplyAdd(Vector512.Create(deviation), Vector512.LoadUnsafe(ref noises, i), position - move);
            fold.Fold(Vector512.ConditionalSelect(good, target, position)).StoreUnsafe(ref positions, i);
            allGood &= good.AsInt64();
        }

        return !Vector512.EqualsAll(allGood, Vector512<long>.AllBitsSet);
    }

    /// <summary>x ← fold(x − t·gradient), as in <see cref="MoveWithNoise"/>.</summary>
    protected static bool Move(AxisFold fold, double time, ReadOnlySpan<double> gradient, Span<double> x)
    {
        ref var positions = ref MemoryMarshal.GetReference(x);
        ref var gradients = ref MemoryMarshal.GetReference(gradient);
        var allGood = Vector512<long>.AllBitsSet;
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var position = Vector512.LoadUnsafe(ref positions, i);
            var move = Vector512.Create(time) * Vector512.LoadUnsafe(ref gradients, i);
            var good = Vector512.LessThanOrEqual(Vector512.Abs(move), Vector512.Create(fold.LargestMove));
            fold.Fold(Vector512.ConditionalSelect(good, position - move, position)).StoreUnsafe(ref positions, i);
            allGood &= good.AsInt64();
        }

        return !Vector512.EqualsAll(allGood, Vector512<long>.AllBitsSet);
    }

    /// <summary>x ← fold(x + deviation·noise).</summary>
    protected static void AddNoise(AxisFold fold, double deviation, ReadOnlySpan<double> noise, Span<double> x)
    {
        ref var positions = ref MemoryMarshal.GetReference(x);
        ref var noises = ref MemoryMarshal.GetReference(noise);
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var target = Vector512.FusedMultiplyAdd(
                Vector512.Create(deviation), Vector512.LoadUnsafe(ref noises, i), Vector512.LoadUnsafe(ref positions, i));
            fold.Fold(target).StoreUnsafe(ref positions, i);
        }
    }

    /// <summary>Counts the walkers that a move left where they were.</summary>
    protected static void CountThrown(
        AxisFold fold, double time, ReadOnlySpan<double> gradient, int first, int count, ref BlockOutcome outcome)
    {
        for (var i = 0; i < count; i++)
        {
            if (Math.Abs(time * gradient[i]) <= fold.LargestMove)
                continue;
            if (outcome.Thrown == 0 || first + i < outcome.FirstThrown)
                outcome.FirstThrown = first + i;
            outcome.Thrown++;
        }
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
        for (var i = 0; i < length; i++)
        {
            movedX[i] = x[i] - time * gradientX[i];
            if (IsPlane)
                movedY[i] = y[i] - time * gradientY[i];
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

    /// <summary>Standard normal numbers of this step for the walkers from <paramref name="first"/> on.</summary>
    protected void DrawNormals(uint purpose, int first, Span<double> target)
        => new NormalDraws(Seed, purpose, (uint)StepsTaken).Fill((ulong)first, target);
}
