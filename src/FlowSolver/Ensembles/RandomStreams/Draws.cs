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
/// Standard normal numbers by the Box-Muller transform, two from each word: 40 bits k make u = (2k + 1)/2⁴¹ and the radius √(−2 ln u), 24 bits the
/// direction, which is uniform over 2²⁴ evenly spaced ones. The largest possible absolute value is 7.54; a normal number is larger with a
/// probability of 5·10⁻¹⁴.
/// </summary>
/// <remarks>
/// Numbers 32j … 32j + 31 are made of words 16j … 16j + 15 of the row: of word i (0 … 7) numbers i and i + 8, of word 8 + i numbers 16 + i and 24 + i.
/// G. E. P. Box, M. E. Muller, A note on the generation of random normal deviates, Ann. Math. Statist. 29 (1958) 610-611. Error of the transform below
/// 10⁻¹¹ of the radius. Same promise as <see cref="UniformDraws"/>.
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
    // Bits, then numbers, stay in the first-level cache; two short loops keep their registers, one long loop spills them.
    private const int ChunkWords = 256;

    internal interface IDistribution
    {
        // Numbers made of one word.
        static abstract int NumbersOfWord { get; }

        // Turns words, a multiple of 16, into numbers.
        static abstract void Transform(ref ulong words, ref double numbers, int wordCount);
    }

    internal readonly struct Uniform : IDistribution
    {
        public static int NumbersOfWord => 1;

        public static void Transform(ref ulong words, ref double numbers, int wordCount)
        {
            for (nuint i = 0; i < (nuint)wordCount; i += 8)
                ToUnit(Vector512.LoadUnsafe(ref words, i)).StoreUnsafe(ref numbers, i);
        }
    }

    internal readonly struct Exponential : IDistribution
    {
        public static int NumbersOfWord => 1;

        public static void Transform(ref ulong words, ref double numbers, int wordCount)
        {
            for (nuint i = 0; i < (nuint)wordCount; i += 8)
                (-VectorMath.LogOfNormal(ToUnit(Vector512.LoadUnsafe(ref words, i)))).StoreUnsafe(ref numbers, i);
        }
    }

    internal readonly struct Normal : IDistribution
    {
        public static int NumbersOfWord => 2;

        public static void Transform(ref ulong words, ref double numbers, int wordCount)
        {
            NormalPairs.Run(ref words, wordCount, 1, new Writer(ref numbers));
        }

        // Stores the numbers as they come.
        private readonly ref struct Writer(ref double target) : INormalSink
        {
            private readonly ref double target = ref target;

            [MethodImpl(MethodImplOptions.AggressiveInlining)]
            public void Take(nuint place, Vector512<double> radius, Vector512<double> share)
                => (radius * share).StoreUnsafe(ref target, place);
        }
    }

    [SkipLocalsInit]
    internal static void Fill<TDistribution>(StreamKey key, ulong offset, Span<double> destination)
        where TDistribution : struct, IDistribution
    {
        var batch = Philox.BatchWords * TDistribution.NumbersOfWord;
        var words = AlignedScratch.Of(stackalloc ulong[ChunkWords + AlignedScratch.Slack], ChunkWords);
        ref var bits = ref MemoryMarshal.GetReference(words);
        var inside = (int)(offset % (uint)batch);
        if (inside != 0 && destination.Length > 0)
        {
            var count = Math.Min(destination.Length, batch - inside);
            FillPart<TDistribution>(key, offset, inside, destination[..count]);
            destination = destination[count..];
            offset += (ulong)count;
        }

        while (destination.Length >= batch)
        {
            var count = Math.Min(ChunkWords * TDistribution.NumbersOfWord, destination.Length - destination.Length % batch);
            Philox.Fill(offset / (uint)TDistribution.NumbersOfWord / 2, key.HighHalf, key.Seed, ref bits, count / TDistribution.NumbersOfWord);
            TDistribution.Transform(ref bits, ref MemoryMarshal.GetReference(destination), count / TDistribution.NumbersOfWord);
            destination = destination[count..];
            offset += (ulong)count;
        }

        if (destination.Length > 0)
            FillPart<TDistribution>(key, offset, 0, destination);
    }

    private static void FillPart<TDistribution>(StreamKey key, ulong offset, int inside, Span<double> destination)
        where TDistribution : struct, IDistribution
    {
        Span<ulong> words = stackalloc ulong[Philox.BatchWords];
        Span<double> numbers = stackalloc double[2 * Philox.BatchWords];
        ref var bits = ref MemoryMarshal.GetReference(words);
        Philox.Fill((offset - (ulong)inside) / (uint)TDistribution.NumbersOfWord / 2, key.HighHalf, key.Seed, ref bits, Philox.BatchWords);
        TDistribution.Transform(ref bits, ref MemoryMarshal.GetReference(numbers), Philox.BatchWords);
        numbers.Slice(inside, destination.Length).CopyTo(destination);
    }

    // The upper 52 bits become the significand of a number in [1, 2); taking off 1 − 2⁻⁵³ leaves (2k + 1)/2⁵³ without rounding.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> ToUnit(Vector512<ulong> bits)
        => (Vector512.ShiftRightLogical(bits, 12) | Vector512.Create(0x3FF0000000000000UL)).AsDouble() - Vector512.Create(0.99999999999999988897769753748);
}
