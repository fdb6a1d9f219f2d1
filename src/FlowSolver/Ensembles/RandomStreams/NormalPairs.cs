using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Ensembles.RandomStreams;

/// <summary>
/// What becomes of normal numbers, eight at a time, each as a product that may end in a fused multiply-add. A sink has no more than four fields: then
/// they stay in registers.
/// </summary>
internal interface INormalSink
{
    /// <summary>Takes the numbers radius·share, the radius times the deviation asked for; <paramref name="place"/> is that of the first one, a multiple of 8.</summary>
    void Take(nuint place, Vector512<double> radius, Vector512<double> share);
}

/// <summary>The Box-Muller transform of words, see <see cref="NormalDraws"/>; what is done with the numbers is part of the same loop.</summary>
internal static class NormalPairs
{
    // Least-maximum polynomials, computed for this file at 50 digits: 2 atanh(s)/s − 2 over s² to 3·10⁻¹⁴; sin(πw/2)/w to 5·10⁻¹²;
    // (cos(πw/2) − 1)/w² to 7·10⁻¹⁴. They are read from an array, not written as literals: then they stay in registers over the loop.
    private static readonly double[] Coefficients =
    [
        0.19584340026833572, 0.22176176059310543, 0.2857210945058342, 0.3999999561915987, 0.6666666667580864, 2, -0.6931471805599453,
        0.00015819507513340162, -0.004681260627874174, 0.07969258184290996, -0.6459640961024307, 1.5707963267877518,
        -2.4857068392173763e-05, 0.0009191659013756896, -0.020863469031729955, 0.2536695072643538, -1.233700550124947, 1,
    ];

    /// <summary>
    /// Turns words, a multiple of 8, into twice as many numbers: words 8i … 8i + 7 give numbers 16i … 16i + 15. The deviation is worked into the
    /// coefficients of the logarithm and costs nothing in the loop.
    /// </summary>
    public static void Run<TSink>(scoped ref ulong words, int wordCount, double deviation, TSink sink)
        where TSink : INormalSink, allows ref struct
    {
        ref var c = ref MemoryMarshal.GetArrayDataReference(Coefficients);
        var variance = deviation * deviation;
        var log0 = Vector512.Create(variance * Unsafe.Add(ref c, 0));
        var log1 = Vector512.Create(variance * Unsafe.Add(ref c, 1));
        var log2 = Vector512.Create(variance * Unsafe.Add(ref c, 2));
        var log3 = Vector512.Create(variance * Unsafe.Add(ref c, 3));
        var log4 = Vector512.Create(variance * Unsafe.Add(ref c, 4));
        var log5 = Vector512.Create(variance * Unsafe.Add(ref c, 5));
        var minusLogTwo = Vector512.Create(variance * Unsafe.Add(ref c, 6));
        var sin0 = Vector512.Create(Unsafe.Add(ref c, 7));
        var sin1 = Vector512.Create(Unsafe.Add(ref c, 8));
        var sin2 = Vector512.Create(Unsafe.Add(ref c, 9));
        var sin3 = Vector512.Create(Unsafe.Add(ref c, 10));
        var sin4 = Vector512.Create(Unsafe.Add(ref c, 11));
        var cos0 = Vector512.Create(Unsafe.Add(ref c, 12));
        var cos1 = Vector512.Create(Unsafe.Add(ref c, 13));
        var cos2 = Vector512.Create(Unsafe.Add(ref c, 14));
        var cos3 = Vector512.Create(Unsafe.Add(ref c, 15));
        var cos4 = Vector512.Create(Unsafe.Add(ref c, 16));
        var one = Vector512.Create(Unsafe.Add(ref c, 17));
        var oneBits = one.AsUInt64();
        var sign = Vector512.Create(0x8000000000000000UL);
        for (nuint i = 0; i < (nuint)wordCount; i += 8)
        {
            // Bits 22 … 61 make u, bits 0 … 21 the place w in (−½, ½) within a quarter turn, bits 62 and 63 the quarter.
            var bits = Vector512.LoadUnsafe(ref words, i);
            var upper = (Vector512.ShiftRightLogical(bits, 10) & Vector512.Create(0x000FFFFFFFFFF000UL)) | oneBits;
            var lower = (Vector512.ShiftLeft(bits, 30) & Vector512.Create(0x000FFFFFFFFFFFFFUL)) | oneBits;
            var u = upper.AsDouble() - Vector512.Create(1 - 1.0 / (1L << 41));
            var w = lower.AsDouble() - Vector512.Create(1.5 - 1.0 / (1L << 23));

            // −ln u, as in VectorMath.LogOfNormal.
            var shifted = u.AsUInt64() + Vector512.Create(0x3FF0000000000000UL - 0x3FE6A09E667F3BCDUL);
            var exponent = (Vector512.ShiftRightLogical(shifted, 52) | Vector512.Create(0x4330000000000000UL)).AsDouble() - Vector512.Create(4503599627370496.0 + 1023.0);
            var m = ((shifted & Vector512.Create(0x000FFFFFFFFFFFFFUL)) + Vector512.Create(0x3FE6A09E667F3BCDUL)).AsDouble();
            var s = (one - m) / (m + one);
            var z = s * s;
            var q = Vector512.FusedMultiplyAdd(log0, z, log1);
            q = Vector512.FusedMultiplyAdd(q, z, log2);
            q = Vector512.FusedMultiplyAdd(q, z, log3);
            q = Vector512.FusedMultiplyAdd(q, z, log4);
            q = Vector512.FusedMultiplyAdd(q, z, log5);
            // The factor √2 of the radius √(−2 ln u) is spent on turning by an eighth: cos and sin of 45° + 90°·w are (cosine ∓ sine)/√2.
            var radius = Vector512.Sqrt(Vector512.FusedMultiplyAdd(exponent, minusLogTwo, s * q));

            var t = w * w;
            var p = Vector512.FusedMultiplyAdd(sin0, t, sin1);
            p = Vector512.FusedMultiplyAdd(p, t, sin2);
            p = Vector512.FusedMultiplyAdd(p, t, sin3);
            p = Vector512.FusedMultiplyAdd(p, t, sin4);
            var sine = p * w;
            var cosine = Vector512.FusedMultiplyAdd(cos0, t, cos1);
            cosine = Vector512.FusedMultiplyAdd(cosine, t, cos2);
            cosine = Vector512.FusedMultiplyAdd(cosine, t, cos3);
            cosine = Vector512.FusedMultiplyAdd(cosine, t, cos4);
            cosine = Vector512.FusedMultiplyAdd(cosine, t, one);

            // Both are positive within the first quarter turn; two signs make all four, so that no angle has to be reduced.
            var first = (cosine - sine).AsUInt64() ^ (bits & sign);
            var second = (cosine + sine).AsUInt64() ^ (Vector512.ShiftLeft(bits, 1) & sign);
            sink.Take(2 * i, radius, first.AsDouble());
            sink.Take(2 * i + 8, radius, second.AsDouble());
        }
    }
}
