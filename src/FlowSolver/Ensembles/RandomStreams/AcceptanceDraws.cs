using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Ensembles.RandomStreams;

/// <summary>
/// −ln u, for decisions: a proposal whose logarithmic odds are R is accepted when R − ln u &gt; 0. Two numbers from each word, u = (2k + 1)/2³³: finer than any
/// acceptance rate can be told apart. Same promise as <see cref="UniformDraws"/>.
/// </summary>
/// <remarks>Numbers 16j + i and 16j + 8 + i, i = 0 … 7, are made of the upper and the lower half of word 8j + i.</remarks>
internal static class AcceptanceDraws
{
    private const int Chunk = 256;

    /// <summary>Writes numbers from <paramref name="offset"/> on, a multiple of 32; as many as the destination holds, a multiple of 16.</summary>
    [SkipLocalsInit]
    public static void Fill(StreamKey key, ulong offset, Span<double> destination)
    {
        var words = AlignedScratch.Of(stackalloc ulong[Chunk + AlignedScratch.Slack], Chunk);
        ref var bits = ref MemoryMarshal.GetReference(words);
        while (destination.Length > 0)
        {
            var count = Math.Min(2 * Chunk, destination.Length);
            Philox.Fill(offset / 4, key.HighHalf, key.Seed, ref bits, (count / 2 + 15) & ~15);
            ref var target = ref MemoryMarshal.GetReference(destination);
            for (nuint i = 0; i < (nuint)count / 2; i += 8)
            {
                var word = Vector512.LoadUnsafe(ref bits, i);
                MinusLog(Vector512.ShiftRightLogical(word, 32)).StoreUnsafe(ref target, 2 * i);
                MinusLog(word & Vector512.Create(0xFFFFFFFFUL)).StoreUnsafe(ref target, 2 * i + 8);
            }

            destination = destination[count..];
            offset += (ulong)count;
        }
    }

    // 2⁵² + k is a number whose significand is k; taking 2⁵² − ½ off leaves k + ½, which is u times 2³².
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> MinusLog(Vector512<ulong> k)
    {
        var scaled = (k | Vector512.Create(0x4330000000000000UL)).AsDouble() - Vector512.Create(4503599627370496.0) + Vector512.Create(0.5);
        return Vector512.Create(22.180709777918249) - VectorMath.LogOfNormal(scaled);
    }
}
