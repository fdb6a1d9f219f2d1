using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// Elementary functions for eight numbers at once, as polynomials that inline into the loop that calls them, and the same for spans.
/// </summary>
/// <remarks>
/// <para>Errors, in units in the last place of the result, over the whole range stated at each function (measured against 34 digits):
/// <see cref="Exp(Vector512{double})"/> 1, <see cref="Log(Vector512{double})"/> 1, <see cref="SinCos"/> 1.5, <see cref="SinCosTurn"/> 1.5,
/// and for the sine and cosine also an absolute error below 2·10⁻¹⁶.</para>
/// <para>Only additions, products, quotients, fused multiply-adds and integer operations are used, each of which rounds in one way everywhere:
/// the results are the same to the byte at any vector width, with or without AVX-512. Lanes outside the stated ranges fall back to
/// <see cref="Math"/> one by one, where the last bit is that of the platform's library.</para>
/// <para>Argument reduction after W. J. Cody, W. Waite, Software Manual for the Elementary Functions (1980); polynomials are least-maximum fits
/// (E. Ya. Remez 1934), computed at 50 digits for this file.</para>
/// </remarks>
public static class VectorMath
{
    // Adding it to a number below 2⁵¹ leaves the nearest integer in the low bits of the significand.
    private const double RoundingShift = 6755399441055744.0;
    private const double LargestReducedAngle = 1e9;
    private const double LargestReducedTurn = 281474976710656.0;

    /// <summary>eˣ. 0 and ∞ where the result leaves the range; denormal results are rounded once. NaN stays NaN.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Exp(Vector512<double> x)
    {
        // Comparisons with NaN are false, so that NaN passes through both selections.
        x = Vector512.ConditionalSelect(Vector512.LessThan(x, Vector512.Create(-746.0)), Vector512.Create(-746.0), x);
        x = Vector512.ConditionalSelect(Vector512.GreaterThan(x, Vector512.Create(710.0)), Vector512.Create(710.0), x);
        var shifted = Vector512.FusedMultiplyAdd(x, Vector512.Create(1.4426950408889634), Vector512.Create(RoundingShift));
        var n = shifted - Vector512.Create(RoundingShift);
        var r = Vector512.FusedMultiplyAdd(n, Vector512.Create(-0.6931471806019545), x);
        r = Vector512.FusedMultiplyAdd(n, Vector512.Create(4.2009150726810846e-11), r);
        var q = Vector512.FusedMultiplyAdd(r, Vector512.Create(2.5000084425775043e-08), Vector512.Create(2.7630248795880495e-07));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(2.7557586290884418e-06));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(2.4801493097828538e-05));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(0.00019841269506688846));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(0.0013888888943631085));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(0.008333333333494399));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(0.041666666666530155));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(0.16666666666666413));
        q = Vector512.FusedMultiplyAdd(q, r, Vector512.Create(0.5000000000000011));
        var p = Vector512.FusedMultiplyAdd(q, r * r, r) + Vector512<double>.One;
        // 2ⁿ as the product of two factors of half the exponent: neither leaves the normal range for −1076 ≤ n ≤ 1024.
        // The shift is logical and the bias makes the number positive: an arithmetic shift of 64 bits needs AVX-512.
        var biased = shifted.AsUInt64() + Vector512.Create(2048UL);
        var low = Vector512.ShiftRightLogical(biased & Vector512.Create(0xFFFUL), 1);
        var high = (biased & Vector512.Create(0xFFFUL)) - low;
        var first = Vector512.ShiftLeft(low - Vector512.Create(1024UL - 1023UL), 52).AsDouble();
        var second = Vector512.ShiftLeft(high - Vector512.Create(1024UL - 1023UL), 52).AsDouble();
        return p * first * second;
    }

    /// <summary>ln x. −∞ at 0, NaN below, ∞ at ∞; NaN stays NaN.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Log(Vector512<double> x)
    {
        var ordinary = Vector512.GreaterThanOrEqual(x, Vector512.Create(2.2250738585072014e-308))
            & Vector512.LessThanOrEqual(x, Vector512.Create(double.MaxValue));
        return Vector512.EqualsAll(ordinary.AsInt64(), Vector512<long>.AllBitsSet) ? LogOfNormal(x) : LogByLane(x);
    }

    /// <summary>ln x for normal positive x only (from 2.3·10⁻³⁰⁸ to the largest number): no lane is checked.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> LogOfNormal(Vector512<double> x)
    {
        // x = 2ᵏ m with √½ ≤ m < √2, by integer arithmetic on the bits; k is turned into a number through the significand of 2⁵² + k.
        var bits = x.AsUInt64() + Vector512.Create(0x3FF0000000000000UL - 0x3FE6A09E667F3BCDUL);
        var k = (Vector512.ShiftRightLogical(bits, 52) | Vector512.Create(0x4330000000000000UL)).AsDouble() - Vector512.Create(4503599627370496.0 + 1023.0);
        var m = ((bits & Vector512.Create(0x000FFFFFFFFFFFFFUL)) + Vector512.Create(0x3FE6A09E667F3BCDUL)).AsDouble();
        var f = m - Vector512<double>.One;
        var s = f / (f + Vector512.Create(2.0));
        var z = s * s;
        var q = Vector512.FusedMultiplyAdd(z, Vector512.Create(0.14796261528298232), Vector512.Create(0.15314021197895802));
        q = Vector512.FusedMultiplyAdd(q, z, Vector512.Create(0.1818356539929352));
        q = Vector512.FusedMultiplyAdd(q, z, Vector512.Create(0.2222219855403849));
        q = Vector512.FusedMultiplyAdd(q, z, Vector512.Create(0.28571428742558613));
        q = Vector512.FusedMultiplyAdd(q, z, Vector512.Create(0.3999999999941399));
        q = Vector512.FusedMultiplyAdd(q, z, Vector512.Create(0.6666666666666734));
        // ln m = f − (f²/2 − s(f²/2 + zq)): the large term f is exact, which keeps the relative error small near 1.
        var half = Vector512.Create(0.5) * f * f;
        var rest = s * Vector512.FusedMultiplyAdd(z, q, half);
        rest = Vector512.FusedMultiplyAdd(k, Vector512.Create(-4.2009150726810846e-11), rest);
        return Vector512.FusedMultiplyAdd(k, Vector512.Create(0.6931471806019545), f - (half - rest));
    }

    /// <summary>sin x and cos x, x in radians. Polynomials for |x| ≤ 10⁹; beyond, one lane at a time by <see cref="Math"/>. NaN for infinities.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static (Vector512<double> Sin, Vector512<double> Cos) SinCos(Vector512<double> x)
    {
        var small = Vector512.LessThanOrEqual(Vector512.Abs(x), Vector512.Create(LargestReducedAngle));
        if (!Vector512.EqualsAll(small.AsInt64(), Vector512<long>.AllBitsSet))
            return SinCosByLane(x);
        var shifted = Vector512.FusedMultiplyAdd(x, Vector512.Create(0.6366197723675814), Vector512.Create(RoundingShift));
        var n = shifted - Vector512.Create(RoundingShift);
        // The first product is exact (both sides are multiples of 2⁻⁵² below 1); the others carry π/2 to 160 bits.
        var r = Vector512.FusedMultiplyAdd(n, Vector512.Create(-1.5707963267948966), x);
        r = Vector512.FusedMultiplyAdd(n, Vector512.Create(-6.123233995736766e-17), r);
        r = Vector512.FusedMultiplyAdd(n, Vector512.Create(1.4973849048591698e-33), r);
        var z = r * r;
        var p = Vector512.FusedMultiplyAdd(z, Vector512.Create(1.589681133535482e-10), Vector512.Create(-2.505075837794939e-08));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(2.7557313693546547e-06));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(-0.00019841269829812378));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(0.00833333333332242));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(-0.16666666666666632));
        var sine = Vector512.FusedMultiplyAdd(p * z, r, r);
        var c = Vector512.FusedMultiplyAdd(z, Vector512.Create(-1.1359658885840392e-11), Vector512.Create(2.0875723480744195e-09));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(-2.755731435380881e-07));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(2.4801587289487104e-05));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(-0.0013888888888874131));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(0.0416666666666666));
        // 1 − z/2 with its rounding error put back.
        var halfSquare = Vector512.Create(0.5) * z;
        var w = Vector512<double>.One - halfSquare;
        var cosine = w + Vector512.FusedMultiplyAdd(c, z * z, Vector512<double>.One - w - halfSquare);
        return Quadrant(shifted.AsUInt64(), sine, cosine);
    }

    /// <summary>sin x; see <see cref="SinCos"/>.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Sin(Vector512<double> x) => SinCos(x).Sin;

    /// <summary>cos x; see <see cref="SinCos"/>.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Cos(Vector512<double> x) => SinCos(x).Cos;

    /// <summary>sin 2πu and cos 2πu, u in turns: the reduction is exact. Polynomials for |u| ≤ 2⁴⁸; beyond, one lane at a time.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static (Vector512<double> Sin, Vector512<double> Cos) SinCosTurn(Vector512<double> turns)
    {
        var small = Vector512.LessThanOrEqual(Vector512.Abs(turns), Vector512.Create(LargestReducedTurn));
        return Vector512.EqualsAll(small.AsInt64(), Vector512<long>.AllBitsSet) ? SinCosOfSmallTurn(turns) : SinCosTurnByLane(turns);
    }

    /// <summary>sin 2πu and cos 2πu for |u| ≤ 2⁴⁸ only: no lane is checked.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static (Vector512<double> Sin, Vector512<double> Cos) SinCosOfSmallTurn(Vector512<double> turns)
    {
        var shifted = Vector512.FusedMultiplyAdd(turns, Vector512.Create(4.0), Vector512.Create(RoundingShift));
        var t = Vector512.FusedMultiplyAdd(shifted - Vector512.Create(RoundingShift), Vector512.Create(-0.25), turns);
        var z = t * t;
        var p = Vector512.FusedMultiplyAdd(z, Vector512.Create(3.7813663135920135), Vector512.Create(-15.093829319705941));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(42.05868550673334));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(-76.70585970878487));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(81.60524927596823));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(-41.34170224039968));
        p = Vector512.FusedMultiplyAdd(p, z, Vector512.Create(2.4492935982947064e-16));
        var sine = Vector512.FusedMultiplyAdd(t, Vector512.Create(6.283185307179586), t * p);
        var c = Vector512.FusedMultiplyAdd(z, Vector512.Create(7.8114779216071994), Vector512.Create(-26.424316956236066));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(60.24462124698745));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(-85.45681710110264));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(64.93939402241355));
        c = Vector512.FusedMultiplyAdd(c, z, Vector512.Create(-19.739208802178513));
        var cosine = Vector512.FusedMultiplyAdd(c, z, Vector512<double>.One);
        return Quadrant(shifted.AsUInt64(), sine, cosine);
    }

    /// <summary>eˣ element by element; <paramref name="destination"/> may be <paramref name="x"/> itself.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static void Exp(ReadOnlySpan<double> x, Span<double> destination) => Apply<ExpOperator>(x, destination);

    /// <summary>ln x element by element; <paramref name="destination"/> may be <paramref name="x"/> itself.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static void Log(ReadOnlySpan<double> x, Span<double> destination) => Apply<LogOperator>(x, destination);

    /// <summary>sin x element by element; <paramref name="destination"/> may be <paramref name="x"/> itself.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static void Sin(ReadOnlySpan<double> x, Span<double> destination) => Apply<SinOperator>(x, destination);

    /// <summary>cos x element by element; <paramref name="destination"/> may be <paramref name="x"/> itself.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static void Cos(ReadOnlySpan<double> x, Span<double> destination) => Apply<CosOperator>(x, destination);

    // Puts sine and cosine of the reduced angle in their places: the low two bits count quarter turns.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static (Vector512<double> Sin, Vector512<double> Cos) Quadrant(Vector512<ulong> quarter, Vector512<double> sine, Vector512<double> cosine)
    {
        var one = Vector512<ulong>.One;
        var even = Vector512.Equals(quarter & one, Vector512<ulong>.Zero).AsDouble();
        var sinSign = Vector512.ShiftLeft(quarter & Vector512.Create(2UL), 62);
        var cosSign = Vector512.ShiftLeft((quarter + one) & Vector512.Create(2UL), 62);
        var sin = Vector512.ConditionalSelect(even, sine, cosine).AsUInt64() ^ sinSign;
        var cos = Vector512.ConditionalSelect(even, cosine, sine).AsUInt64() ^ cosSign;
        return (sin.AsDouble(), cos.AsDouble());
    }

    [MethodImpl(MethodImplOptions.NoInlining)]
    private static Vector512<double> LogByLane(Vector512<double> x)
    {
        Span<double> lane = stackalloc double[8];
        x.CopyTo(lane);
        for (var i = 0; i < lane.Length; i++)
            lane[i] = Math.Log(lane[i]);
        return Vector512.Create<double>(lane);
    }

    [MethodImpl(MethodImplOptions.NoInlining)]
    private static (Vector512<double> Sin, Vector512<double> Cos) SinCosByLane(Vector512<double> x)
    {
        Span<double> sin = stackalloc double[8];
        Span<double> cos = stackalloc double[8];
        x.CopyTo(sin);
        for (var i = 0; i < sin.Length; i++)
            (sin[i], cos[i]) = Math.SinCos(sin[i]);
        return (Vector512.Create<double>(sin), Vector512.Create<double>(cos));
    }

    [MethodImpl(MethodImplOptions.NoInlining)]
    private static (Vector512<double> Sin, Vector512<double> Cos) SinCosTurnByLane(Vector512<double> turns)
    {
        Span<double> lane = stackalloc double[8];
        turns.CopyTo(lane);
        for (var i = 0; i < lane.Length; i++)
            lane[i] -= Math.Round(lane[i]);
        return SinCosOfSmallTurn(Vector512.Create<double>(lane));
    }

    private interface IOperator
    {
        static abstract Vector512<double> Invoke(Vector512<double> x);
    }

    private readonly struct ExpOperator : IOperator
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Invoke(Vector512<double> x) => Exp(x);
    }

    private readonly struct LogOperator : IOperator
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Invoke(Vector512<double> x) => Log(x);
    }

    private readonly struct SinOperator : IOperator
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Invoke(Vector512<double> x) => Sin(x);
    }

    private readonly struct CosOperator : IOperator
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Invoke(Vector512<double> x) => Cos(x);
    }

    private static void Apply<TOperator>(ReadOnlySpan<double> x, Span<double> destination)
        where TOperator : struct, IOperator
    {
        Require.Length(destination.Length, x.Length);
        ref var source = ref MemoryMarshal.GetReference(x);
        ref var target = ref MemoryMarshal.GetReference(destination);
        var whole = x.Length - x.Length % 8;
        for (var i = 0; i < whole; i += 8)
            TOperator.Invoke(Vector512.LoadUnsafe(ref source, (nuint)i)).StoreUnsafe(ref target, (nuint)i);
        if (whole == x.Length)
            return;
        // The rest goes through the same vector code, so that a value does not depend on its place in the span.
        Span<double> rest = stackalloc double[8];
        rest.Fill(1);
        x[whole..].CopyTo(rest);
        TOperator.Invoke(Vector512.Create<double>(rest)).CopyTo(rest);
        rest[..(x.Length - whole)].CopyTo(destination[whole..]);
    }
}
