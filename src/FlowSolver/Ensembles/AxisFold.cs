using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary><see cref="Interval.Fold"/> for eight positions at once.</summary>
internal readonly struct AxisFold
{
    private readonly Interval interval;
    private readonly double from;
    private readonly double to;
    private readonly bool periodic;

    public AxisFold(Interval interval)
    {
        this.interval = interval;
        from = interval.From;
        to = interval.To;
        periodic = interval.Ends == AxisEnds.Periodic;
        // On a circle any finite move is a move; at a wall one that spans the whole domain is not the explicit step of a stable scheme.
        LargestMove = periodic ? double.MaxValue : interval.Length;
    }

    /// <summary>A deterministic move beyond it is a blow-up.</summary>
    public double LargestMove { get; }

    /// <summary>Folds a span whose length is a multiple of 8; only looks at it when all of it lies inside.</summary>
    public void FoldInPlace(Span<double> x)
    {
        if (!HoldsAll(x))
            Fold(x, x);
    }

    /// <summary>Whether every position, of which there are a multiple of 8, lies inside.</summary>
    public bool HoldsAll(ReadOnlySpan<double> x)
    {
        ref var positions = ref MemoryMarshal.GetReference(x);
        var lowest = Vector512.Create(from);
        var highest = Vector512.Create(to);
        // Two chains each: one would wait for itself.
        var lowestToo = lowest;
        var highestToo = highest;
        nuint i = 0;
        for (; i + 16 <= (nuint)x.Length; i += 16)
        {
            var position = Vector512.LoadUnsafe(ref positions, i);
            var other = Vector512.LoadUnsafe(ref positions, i + 8);
            lowest = Vector512.MinNative(lowest, position);
            highest = Vector512.MaxNative(highest, position);
            lowestToo = Vector512.MinNative(lowestToo, other);
            highestToo = Vector512.MaxNative(highestToo, other);
        }

        for (; i < (nuint)x.Length; i += 8)
        {
            var position = Vector512.LoadUnsafe(ref positions, i);
            lowest = Vector512.MinNative(lowest, position);
            highest = Vector512.MaxNative(highest, position);
        }

        lowest = Vector512.MinNative(lowest, lowestToo);
        highest = Vector512.MaxNative(highest, highestToo);
        return Vector512.EqualsAll(lowest, Vector512.Create(from)) && Vector512.EqualsAll(highest, Vector512.Create(to));
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public Vector512<double> Fold(Vector512<double> x)
    {
        var outside = Vector512.LessThan(x, Vector512.Create(from)) | Vector512.GreaterThan(x, Vector512.Create(to));
        return Vector512.EqualsAll(outside.AsInt64(), Vector512<long>.Zero) ? x : FoldOutside(x);
    }

    /// <summary>Folds a span whose length is a multiple of 8.</summary>
    public void Fold(ReadOnlySpan<double> x, Span<double> destination)
    {
        ref var source = ref MemoryMarshal.GetReference(x);
        ref var target = ref MemoryMarshal.GetReference(destination);
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
            Fold(Vector512.LoadUnsafe(ref source, i)).StoreUnsafe(ref target, i);
    }

    // One reflection or turn for all lanes; the rest, far outside, one by one.
    [MethodImpl(MethodImplOptions.NoInlining)]
    private Vector512<double> FoldOutside(Vector512<double> x)
    {
        var below = Vector512.LessThan(x, Vector512.Create(from));
        var above = Vector512.GreaterThan(x, Vector512.Create(to));
        var length = Vector512.Create(to - from);
        var fromBelow = periodic ? x + length : Vector512.Create(from) + (Vector512.Create(from) - x);
        var fromAbove = periodic ? x - length : Vector512.Create(to) - (x - Vector512.Create(to));
        var folded = Vector512.ConditionalSelect(below, fromBelow, Vector512.ConditionalSelect(above, fromAbove, x));
        var inside = Vector512.GreaterThanOrEqual(folded, Vector512.Create(from)) & Vector512.LessThanOrEqual(folded, Vector512.Create(to));
        if (Vector512.EqualsAll(inside.AsInt64(), Vector512<long>.AllBitsSet))
            return folded;
        Span<double> lane = stackalloc double[8];
        Vector512.CopyTo(x, lane);
        for (var i = 0; i < lane.Length; i++)
            lane[i] = interval.Fold(lane[i]);
        return Vector512.Create<double>(lane);
    }
}
