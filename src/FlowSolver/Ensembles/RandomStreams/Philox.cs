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
    /// Writes the outputs of successive counters as <see cref="Batch"/> gives them: for every eight counters sixteen words, first halves first.
    /// </summary>
    /// <param name="firstIndex">A multiple of 8.</param>
    /// <param name="highHalf">Words 2 and 3 of the counters, word 2 below.</param>
    /// <param name="key">Both key words, word 0 below.</param>
    /// <param name="target">First of the words to write.</param>
    /// <param name="count">Number of words, a multiple of 16.</param>
    [SkipLocalsInit]
    internal static void Fill(ulong firstIndex, ulong highHalf, ulong key, ref ulong target, int count)
    {
        nuint i = 0;
        // Four batches at once: independent chains fill the waiting times of each other's multiplications. Without 32 wide registers they would spill.
        if (Vector512.IsHardwareAccelerated && count >= 4 * BatchWords)
        {
            Span<ulong> roundKeys = stackalloc ulong[2 * Rounds];
            ScheduleKeys(key, roundKeys);
            for (; i + 4 * BatchWords <= (nuint)count && (uint)firstIndex <= uint.MaxValue - 31; i += 4 * BatchWords, firstIndex += 32)
                FourBatches(firstIndex, highHalf, ref MemoryMarshal.GetReference(roundKeys), ref Unsafe.Add(ref target, i));
        }

        for (; i < (nuint)count; i += BatchWords, firstIndex += 8)
        {
            var (first, second) = Batch(firstIndex, highHalf, key);
            first.StoreUnsafe(ref target, i);
            second.StoreUnsafe(ref target, i + 8);
        }
    }

    // The indices share their upper 32 bits. Words 1, 2 and 3 are then the same for all counters: the parts of the first two rounds that depend on
    // them alone are numbers and not vectors.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static void FourBatches(ulong firstIndex, ulong highHalf, ref ulong keys, ref ulong target)
    {
        var product = (ulong)MultiplierB * (uint)highHalf;
        var word0 = (uint)(product >> 32) ^ (uint)(firstIndex >> 32) ^ (uint)keys;
        var secondProduct = (ulong)MultiplierA * word0;
        var mixA = Vector512.Create((highHalf >> 32) ^ Unsafe.Add(ref keys, 1));
        var mixB = Vector512.Create((ulong)(uint)product ^ Unsafe.Add(ref keys, 2));
        var mixC = Vector512.Create((secondProduct >> 32) ^ Unsafe.Add(ref keys, 3));
        var multiplierA = Vector512.Create((ulong)MultiplierA);
        var multiplierB = Vector512.Create((ulong)MultiplierB);
        var lanes = Vector512.Create(firstIndex) + Vector512.Create(0UL, 1, 2, 3, 4, 5, 6, 7);

        // Round 1: word 0 → word0, word 1 → low(product), word 2 → hi(a) ^ mixA, word 3 → a.
        var c3 = LowProduct(lanes, multiplierA);
        var d3 = LowProduct(lanes + Vector512.Create(8UL), multiplierA);
        var e3 = LowProduct(lanes + Vector512.Create(16UL), multiplierA);
        var f3 = LowProduct(lanes + Vector512.Create(24UL), multiplierA);
        var c2 = Vector512.ShiftRightLogical(c3, 32) ^ mixA;
        var d2 = Vector512.ShiftRightLogical(d3, 32) ^ mixA;
        var e2 = Vector512.ShiftRightLogical(e3, 32) ^ mixA;
        var f2 = Vector512.ShiftRightLogical(f3, 32) ^ mixA;

        // Round 2: word 0 → hi(b) ^ mixB, word 1 → b, word 2 → word 3 ^ mixC, word 3 → low(secondProduct).
        var c1 = LowProduct(c2, multiplierB);
        var d1 = LowProduct(d2, multiplierB);
        var e1 = LowProduct(e2, multiplierB);
        var f1 = LowProduct(f2, multiplierB);
        var c0 = Vector512.ShiftRightLogical(c1, 32) ^ mixB;
        var d0 = Vector512.ShiftRightLogical(d1, 32) ^ mixB;
        var e0 = Vector512.ShiftRightLogical(e1, 32) ^ mixB;
        var f0 = Vector512.ShiftRightLogical(f1, 32) ^ mixB;
        c2 = c3 ^ mixC;
        d2 = d3 ^ mixC;
        e2 = e3 ^ mixC;
        f2 = f3 ^ mixC;
        c3 = d3 = e3 = f3 = Vector512.Create(secondProduct);

        for (nuint round = 4; round < 2 * Rounds; round += 2)
        {
            var key0 = Vector512.Create(Unsafe.Add(ref keys, round));
            var key1 = Vector512.Create(Unsafe.Add(ref keys, round + 1));
            var ca = LowProduct(c0, multiplierA);
            var da = LowProduct(d0, multiplierA);
            var ea = LowProduct(e0, multiplierA);
            var fa = LowProduct(f0, multiplierA);
            var cb = LowProduct(c2, multiplierB);
            var db = LowProduct(d2, multiplierB);
            var eb = LowProduct(e2, multiplierB);
            var fb = LowProduct(f2, multiplierB);
            c0 = Vector512.ShiftRightLogical(cb, 32) ^ c1 ^ key0;
            d0 = Vector512.ShiftRightLogical(db, 32) ^ d1 ^ key0;
            e0 = Vector512.ShiftRightLogical(eb, 32) ^ e1 ^ key0;
            f0 = Vector512.ShiftRightLogical(fb, 32) ^ f1 ^ key0;
            c2 = Vector512.ShiftRightLogical(ca, 32) ^ c3 ^ key1;
            d2 = Vector512.ShiftRightLogical(da, 32) ^ d3 ^ key1;
            e2 = Vector512.ShiftRightLogical(ea, 32) ^ e3 ^ key1;
            f2 = Vector512.ShiftRightLogical(fa, 32) ^ f3 ^ key1;
            (c1, d1, e1, f1) = (cb, db, eb, fb);
            (c3, d3, e3, f3) = (ca, da, ea, fa);
        }

        Store(c0, c1, c2, c3, ref target, 0);
        Store(d0, d1, d2, d3, ref target, BatchWords);
        Store(e0, e1, e2, e3, ref target, 2 * BatchWords);
        Store(f0, f1, f2, f3, ref target, 3 * BatchWords);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static void Store(
        Vector512<ulong> c0, Vector512<ulong> c1, Vector512<ulong> c2, Vector512<ulong> c3, ref ulong target, nuint offset)
    {
        var (first, second) = Gather(c0, c1, c2, c3);
        first.StoreUnsafe(ref target, offset);
        second.StoreUnsafe(ref target, offset + 8);
    }

    // The keys of all rounds, two a round.
    private static void ScheduleKeys(ulong key, Span<ulong> roundKeys)
    {
        var key0 = (uint)key;
        var key1 = (uint)(key >> 32);
        for (var round = 0; round < 2 * Rounds; round += 2)
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
