using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using System.Runtime.Intrinsics.X86;

namespace FlowSolver.Ensembles.RandomStreams;

/// <summary>
/// The counter-based generator Philox 4x32-10: a bijection of 128-bit counters under a 64-bit key, whose outputs for successive counters pass
/// the known statistical batteries. It has no state, so that any number can be made at any time on any thread.
/// </summary>
/// <remarks>
/// Source: J. K. Salmon, M. A. Moraes, R. O. Dror, D. E. Shaw, Parallel random numbers: as easy as 1, 2, 3, SC'11 (2011),
/// doi:10.1145/2063384.2063405. The promise of this class is the bits: they never change between versions.
/// </remarks>
public static class Philox
{
    private const uint MultiplierA = 0xD2511F53;
    private const uint MultiplierB = 0xCD9E8D57;
    private const uint WeylA = 0x9E3779B9;
    private const uint WeylB = 0xBB67AE85;
    private const int Rounds = 10;

    /// <summary>Number of 64-bit words that one batch of eight counters yields.</summary>
    public const int BatchWords = 16;

    /// <summary>The four output words of one counter.</summary>
    /// <param name="counter0">Counter, lowest word.</param>
    /// <param name="counter1">Counter, second word.</param>
    /// <param name="counter2">Counter, third word.</param>
    /// <param name="counter3">Counter, highest word.</param>
    /// <param name="key0">Key, low word.</param>
    /// <param name="key1">Key, high word.</param>
    public static (uint Word0, uint Word1, uint Word2, uint Word3) Block(
        uint counter0, uint counter1, uint counter2, uint counter3, uint key0, uint key1)
    {
        for (var round = 0; round < Rounds; round++)
        {
            var a = (ulong)MultiplierA * counter0;
            var b = (ulong)MultiplierB * counter2;
            (counter0, counter1, counter2, counter3) = ((uint)(b >> 32) ^ counter1 ^ key0, (uint)b, (uint)(a >> 32) ^ counter3 ^ key1, (uint)a);
            key0 += WeylA;
            key1 += WeylB;
        }

        return (counter0, counter1, counter2, counter3);
    }

    /// <summary>
    /// Eight counters at once: their low halves are <paramref name="firstIndex"/> … <paramref name="firstIndex"/> + 7, their high halves
    /// <paramref name="highHalf"/>. Lane i of the results holds words 0 and 1, and words 2 and 3, of counter i, the lower-numbered word below.
    /// </summary>
    /// <param name="firstIndex">A multiple of 8.</param>
    /// <param name="highHalf">Words 2 and 3 of the counters, word 2 below.</param>
    /// <param name="key">Both key words, word 0 below.</param>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static (Vector512<ulong> First, Vector512<ulong> Second) Batch(ulong firstIndex, ulong highHalf, ulong key)
    {
        // Each 32-bit word sits in the low half of a 64-bit lane; the products read only that half, so that what gathers above it does no harm.
        var c0 = Vector512.Create(firstIndex) + Vector512.Create(0UL, 1, 2, 3, 4, 5, 6, 7);
        var c1 = Vector512.Create(firstIndex >> 32);
        var c2 = Vector512.Create(highHalf);
        var c3 = Vector512.Create(highHalf >> 32);
        var key0 = (uint)key;
        var key1 = (uint)(key >> 32);
        for (var round = 0; round < Rounds; round++)
        {
            Round(ref c0, ref c1, ref c2, ref c3, Vector512.Create((ulong)key0), Vector512.Create((ulong)key1));
            key0 += WeylA;
            key1 += WeylB;
        }

        return Gather(c0, c1, c2, c3);
    }

    /// <summary>
    /// Two batches at once, the second one of counters <paramref name="firstIndex"/> + 8 … + 15: two independent chains fill the waiting times of
    /// each other's multiplications and share the round keys.
    /// </summary>
    /// <param name="firstIndex">A multiple of 8.</param>
    /// <param name="highHalf">Words 2 and 3 of the counters, word 2 below.</param>
    /// <param name="roundKeys">From <see cref="ScheduleKeys"/>.</param>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    internal static (Vector512<ulong> First, Vector512<ulong> Second, Vector512<ulong> Third, Vector512<ulong> Fourth) BatchPair(
        ulong firstIndex, ulong highHalf, ReadOnlySpan<ulong> roundKeys)
    {
        var c0 = Vector512.Create(firstIndex) + Vector512.Create(0UL, 1, 2, 3, 4, 5, 6, 7);
        var c1 = Vector512.Create(firstIndex >> 32);
        var c2 = Vector512.Create(highHalf);
        var c3 = Vector512.Create(highHalf >> 32);
        var d0 = Vector512.Create(firstIndex + 8) + Vector512.Create(0UL, 1, 2, 3, 4, 5, 6, 7);
        var d1 = Vector512.Create((firstIndex + 8) >> 32);
        var d2 = c2;
        var d3 = c3;
        ref var keys = ref MemoryMarshal.GetReference(roundKeys);
        for (nuint round = 0; round < 2 * Rounds; round += 4)
        {
            var k0 = Vector512.Create(Unsafe.Add(ref keys, round));
            var k1 = Vector512.Create(Unsafe.Add(ref keys, round + 1));
            Round(ref c0, ref c1, ref c2, ref c3, k0, k1);
            Round(ref d0, ref d1, ref d2, ref d3, k0, k1);
            k0 = Vector512.Create(Unsafe.Add(ref keys, round + 2));
            k1 = Vector512.Create(Unsafe.Add(ref keys, round + 3));
            Round(ref c0, ref c1, ref c2, ref c3, k0, k1);
            Round(ref d0, ref d1, ref d2, ref d3, k0, k1);
        }

        var (first, second) = Gather(c0, c1, c2, c3);
        var (third, fourth) = Gather(d0, d1, d2, d3);
        return (first, second, third, fourth);
    }

    /// <summary>Length of <see cref="ScheduleKeys"/>' target.</summary>
    internal const int RoundKeys = 2 * Rounds;

    /// <summary>Writes the keys of all rounds, two a round, for loops that use the same key many times.</summary>
    internal static void ScheduleKeys(ulong key, Span<ulong> roundKeys)
    {
        var key0 = (uint)key;
        var key1 = (uint)(key >> 32);
        for (var round = 0; round < RoundKeys; round += 2)
        {
            roundKeys[round] = key0;
            roundKeys[round + 1] = key1;
            key0 += WeylA;
            key1 += WeylB;
        }
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static void Round(
        ref Vector512<ulong> c0, ref Vector512<ulong> c1, ref Vector512<ulong> c2, ref Vector512<ulong> c3, Vector512<ulong> key0, Vector512<ulong> key1)
    {
        var a = LowProduct(c0, Vector512.Create((ulong)MultiplierA));
        var b = LowProduct(c2, Vector512.Create((ulong)MultiplierB));
        c0 = Vector512.ShiftRightLogical(b, 32) ^ c1 ^ key0;
        c2 = Vector512.ShiftRightLogical(a, 32) ^ c3 ^ key1;
        c1 = b;
        c3 = a;
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static (Vector512<ulong> First, Vector512<ulong> Second) Gather(
        Vector512<ulong> c0, Vector512<ulong> c1, Vector512<ulong> c2, Vector512<ulong> c3)
    {
        var low = Vector512.Create(0xFFFFFFFFUL);
        return ((c0 & low) | Vector512.ShiftLeft(c1, 32), (c2 & low) | Vector512.ShiftLeft(c3, 32));
    }

    // Product of the low halves of 64-bit lanes.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<ulong> LowProduct(Vector512<ulong> a, Vector512<ulong> multiplier)
    {
        if (Avx512F.IsSupported)
            return Avx512F.Multiply(a.AsUInt32(), multiplier.AsUInt32());
        if (Avx2.IsSupported)
        {
            return Vector512.Create(
                Avx2.Multiply(a.GetLower().AsUInt32(), multiplier.GetLower().AsUInt32()),
                Avx2.Multiply(a.GetUpper().AsUInt32(), multiplier.GetUpper().AsUInt32()));
        }

        return (a & Vector512.Create(0xFFFFFFFFUL)) * multiplier;
    }
}
