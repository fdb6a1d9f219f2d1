using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Ensembles.RandomStreams;

/// <summary>Uniform numbers in (0, 1): (2k + 1)/2⁵³ with k the upper 52 bits of a word. Neither 0 nor 1 occurs, and u and 1 − u are equally likely.</summary>
/// <remarks>The bytes depend on key and number alone: not on the vector width, the batch, the thread. This promise holds for all types in this file.</remarks>
/// <param name="Key">Which row of words.</param>
public readonly record struct UniformDraws(StreamKey Key)
{
    /// <summary>A stream from its parts.</summary>
    public UniformDraws(ulong seed, uint purpose, uint step = 0) : this(new StreamKey(seed, purpose, step)) { }

    /// <summary>Writes numbers <paramref name="offset"/>, <paramref name="offset"/> + 1, … of the stream. Allocates nothing.</summary>
    public void Fill(ulong offset, Span<double> destination) => Draws.Fill<Draws.Uniform>(Key, offset, destination);
}

/// <summary>
/// Standard normal numbers by the Box-Muller transform: numbers i and i + 8 of a batch of 16 are r cos 2πv and r sin 2πv with r = √(−2 ln u).
/// The largest possible absolute value is 8.57, whose probability is below 10⁻¹⁷.
/// </summary>
/// <remarks>
/// G. E. P. Box, M. E. Muller, A note on the generation of random normal deviates, Ann. Math. Statist. 29 (1958) 610-611. Error of the transform
/// below 3 units in the last place. Same promise as <see cref="UniformDraws"/>.
/// </remarks>
/// <param name="Key">Which row of words.</param>
public readonly record struct NormalDraws(StreamKey Key)
{
    /// <summary>A stream from its parts.</summary>
    public NormalDraws(ulong seed, uint purpose, uint step = 0) : this(new StreamKey(seed, purpose, step)) { }

    /// <summary>Writes numbers <paramref name="offset"/>, <paramref name="offset"/> + 1, … of the stream. Allocates nothing.</summary>
    public void Fill(ulong offset, Span<double> destination) => Draws.Fill<Draws.Normal>(Key, offset, destination);
}

/// <summary>Exponential numbers of mean 1, −ln u. Same promise as <see cref="UniformDraws"/>.</summary>
/// <param name="Key">Which row of words.</param>
public readonly record struct ExponentialDraws(StreamKey Key)
{
    /// <summary>A stream from its parts.</summary>
    public ExponentialDraws(ulong seed, uint purpose, uint step = 0) : this(new StreamKey(seed, purpose, step)) { }

    /// <summary>Writes numbers <paramref name="offset"/>, <paramref name="offset"/> + 1, … of the stream. Allocates nothing.</summary>
    public void Fill(ulong offset, Span<double> destination) => Draws.Fill<Draws.Exponential>(Key, offset, destination);
}

// What is drawn, apart from the bits it is drawn from.
internal static class Draws
{
    // 4 KB: bits, then numbers, stay in the first-level cache; two short loops keep their registers, one long loop spills them.
    private const int Chunk = 512;

    internal interface IDistribution
    {
        // Turns 16 k uniform numbers in place.
        static abstract void Transform(ref double numbers, int count);
    }

    internal readonly struct Uniform : IDistribution
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static void Transform(ref double numbers, int count) { }
    }

    internal readonly struct Exponential : IDistribution
    {
        public static void Transform(ref double numbers, int count)
        {
            for (nuint i = 0; i < (nuint)count; i += 8)
                (-VectorMath.LogOfNormal(Vector512.LoadUnsafe(ref numbers, i))).StoreUnsafe(ref numbers, i);
        }
    }

    internal readonly struct Normal : IDistribution
    {
        public static void Transform(ref double numbers, int count)
        {
            for (nuint i = 0; i < (nuint)count; i += 16)
            {
                var radius = Vector512.Sqrt(Vector512.Create(-2.0) * VectorMath.LogOfNormal(Vector512.LoadUnsafe(ref numbers, i)));
                var (sin, cos) = VectorMath.SinCosOfSmallTurn(Vector512.LoadUnsafe(ref numbers, i + 8));
                (radius * cos).StoreUnsafe(ref numbers, i);
                (radius * sin).StoreUnsafe(ref numbers, i + 8);
            }
        }
    }

    internal static void Fill<TDistribution>(StreamKey key, ulong offset, Span<double> destination)
        where TDistribution : struct, IDistribution
    {
        var inside = (int)(offset % Philox.BatchWords);
        if (inside != 0)
        {
            var count = Math.Min(destination.Length, Philox.BatchWords - inside);
            FillPart<TDistribution>(key, offset, inside, destination[..count]);
            destination = destination[count..];
            offset += (ulong)count;
        }

        while (destination.Length >= Philox.BatchWords)
        {
            var count = Math.Min(Chunk, destination.Length - destination.Length % Philox.BatchWords);
            ref var target = ref MemoryMarshal.GetReference(destination);
            FillWhole(key, offset, ref target, count);
            TDistribution.Transform(ref target, count);
            destination = destination[count..];
            offset += (ulong)count;
        }

        if (destination.Length > 0)
            FillPart<TDistribution>(key, offset, 0, destination);
    }

    private static void FillPart<TDistribution>(StreamKey key, ulong offset, int inside, Span<double> destination)
        where TDistribution : struct, IDistribution
    {
        Span<double> batch = stackalloc double[Philox.BatchWords];
        ref var target = ref MemoryMarshal.GetReference(batch);
        FillWhole(key, offset - (ulong)inside, ref target, Philox.BatchWords);
        TDistribution.Transform(ref target, Philox.BatchWords);
        batch.Slice(inside, destination.Length).CopyTo(destination);
    }

    private static void FillWhole(StreamKey key, ulong offset, ref double target, int count)
    {
        var highHalf = key.HighHalf;
        var index = offset / 2;
        nuint i = 0;
        Span<ulong> roundKeys = stackalloc ulong[Philox.RoundKeys];
        Philox.ScheduleKeys(key.Seed, roundKeys);
        // Without 32 wide registers two chains at once would only spill.
        for (; Vector512.IsHardwareAccelerated && i + 2 * Philox.BatchWords <= (nuint)count; i += 2 * Philox.BatchWords, index += 16)
        {
            var (first, second, third, fourth) = Philox.BatchPair(index, highHalf, roundKeys);
            ToUnit(first).StoreUnsafe(ref target, i);
            ToUnit(second).StoreUnsafe(ref target, i + 8);
            ToUnit(third).StoreUnsafe(ref target, i + 16);
            ToUnit(fourth).StoreUnsafe(ref target, i + 24);
        }

        for (; i < (nuint)count; i += Philox.BatchWords, index += 8)
        {
            var (first, second) = Philox.Batch(index, highHalf, key.Seed);
            ToUnit(first).StoreUnsafe(ref target, i);
            ToUnit(second).StoreUnsafe(ref target, i + 8);
        }
    }

    // The upper 52 bits become the significand of a number in [1, 2); taking off 1 − 2⁻⁵³ leaves (2k + 1)/2⁵³ without rounding.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> ToUnit(Vector512<ulong> bits)
        => (Vector512.ShiftRightLogical(bits, 12) | Vector512.Create(0x3FF0000000000000UL)).AsDouble() - Vector512.Create(0.99999999999999988897769753748);
}
