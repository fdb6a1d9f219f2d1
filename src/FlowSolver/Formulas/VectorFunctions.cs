using System.Runtime.CompilerServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Formulas;

/// <summary>
/// The functions of the formula language on eight numbers at once. Each lane is computed on its own, so that a value does not depend on where in a
/// span it stands. NaN stays NaN; infinities give the limits. Errors are a few units in the last place.
/// </summary>
/// <remarks>Polynomial coefficients were fitted for this project at Chebyshev points in 50-digit arithmetic; the fit error is below 2e-18 relative.</remarks>
internal static class VectorFunctions
{
    private const double Ln2High = 0.6931471803691238;
    private const double Ln2Low = 1.9082149292705877e-10;

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Exp(Vector512<double> u) => VectorMath.Exp(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Log(Vector512<double> u) => VectorMath.Log(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Sin(Vector512<double> u) => VectorMath.Sin(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Cos(Vector512<double> u) => VectorMath.Cos(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static (Vector512<double> Sin, Vector512<double> Cos) SinCos(Vector512<double> u) => VectorMath.SinCos(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Tan(Vector512<double> u)
    {
        var (sin, cos) = VectorMath.SinCos(u);
        return sin / cos;
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Sqrt(Vector512<double> u) => Vector512.Sqrt(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Abs(Vector512<double> u) => Vector512.Abs(u);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Minimum(Vector512<double> a, Vector512<double> b) => Vector512.Min(a, b);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Maximum(Vector512<double> a, Vector512<double> b) => Vector512.Max(a, b);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Negate(Vector512<double> a) => -a;

    /// <summary><paramref name="below"/> where <paramref name="condition"/> &lt; 0, else <paramref name="otherwise"/>.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Select(Vector512<double> condition, Vector512<double> below, Vector512<double> otherwise)
        => Vector512.ConditionalSelect(Vector512.LessThan(condition, Vector512<double>.Zero), below, otherwise);

    /// <summary>0 below 0, 1 from 0 on.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Step(Vector512<double> u)
    {
        var result = Vector512.ConditionalSelect(Vector512.LessThan(u, Vector512<double>.Zero), Vector512<double>.Zero, Vector512<double>.One);
        return Vector512.ConditionalSelect(Vector512.Equals(u, u), result, u);
    }

    /// <summary>−1, 0 or 1.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Sign(Vector512<double> u)
    {
        // u itself where neither comparison holds: 0 stays 0 and NaN stays NaN.
        var result = Vector512.ConditionalSelect(Vector512.LessThan(u, Vector512<double>.Zero), Vector512.Create(-1.0), u);
        return Vector512.ConditionalSelect(Vector512.GreaterThan(u, Vector512<double>.Zero), Vector512<double>.One, result);
    }

    /// <summary>e^u − 1 without cancellation near 0, for u ≥ 0.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> ExpMinusOne(Vector512<double> u)
    {
        // u = k ln 2 + r, |r| ≤ ½ ln 2; e^u − 1 = 2^k (e^r − 1) + (2^k − 1). Beyond 1023 ln 2 every caller has reached its limit.
        var clamped = Vector512.Min(u, Vector512.Create(708.0));
        var k = Vector512.Round(clamped * Vector512.Create(1.4426950408889634));
        var r = Vector512.FusedMultiplyAdd(k, Vector512.Create(-Ln2High), clamped);
        r = Vector512.FusedMultiplyAdd(k, Vector512.Create(-Ln2Low), r);
        // Taylor to r¹³: the rest is below (0.3466)¹³/14! = 1.2e-17 of r.
        var p = Vector512.Create(1.0 / 6227020800);
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 479001600));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 39916800));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 3628800));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 362880));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 40320));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 5040));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 720));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 120));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 24));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(1.0 / 6));
        p = Vector512.FusedMultiplyAdd(p, r, Vector512.Create(0.5));
        p = Vector512.FusedMultiplyAdd(p * r, r, r);
        var power = Vector512.ShiftLeft(Vector512.ConvertToInt64(k) + Vector512.Create(1023L), 52).AsDouble();
        return Vector512.FusedMultiplyAdd(power, p, power - Vector512<double>.One);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Tanh(Vector512<double> u)
    {
        // tanh |u| = E/(E + 2), E = e^(2|u|) − 1; past 22 the answer is 1 to rounding.
        var twice = Vector512.Min(Vector512.Abs(u) * Vector512.Create(2.0), Vector512.Create(44.0));
        var e = ExpMinusOne(twice);
        return WithSignOf(e / (e + Vector512.Create(2.0)), u);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Sinh(Vector512<double> u)
    {
        var magnitude = Vector512.Abs(u);
        var e = ExpMinusOne(magnitude);
        var near = (e + e / (e + Vector512<double>.One)) * Vector512.Create(0.5);
        var far = HalfExp(magnitude);
        return WithSignOf(Vector512.ConditionalSelect(Vector512.LessThan(magnitude, Vector512.Create(40.0)), near, far), u);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Cosh(Vector512<double> u)
    {
        var half = HalfExp(Vector512.Abs(u));
        return half + Vector512.Create(0.25) / half;
    }

    /// <summary>½ e^u for u ≥ 0, also where e^u itself would overflow.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> HalfExp(Vector512<double> u)
        // Nearly ln 2, but with so few digits that the difference is exact; the factor holds the rest, ½ e^(355/512).
        => Exp(u - Vector512.Create(0.693359375)) * Vector512.Create(1.0002122169548873);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Atan(Vector512<double> u)
    {
        // |u| > 1 by π/2 − atan(1/|u|), then beyond tan(π/8) by π/4 + atan((t − 1)/(t + 1)).
        var magnitude = Vector512.Abs(u);
        var isLarge = Vector512.GreaterThan(magnitude, Vector512<double>.One);
        var t = Vector512.ConditionalSelect(isLarge, Vector512<double>.One / magnitude, magnitude);
        var isUpper = Vector512.GreaterThan(t, Vector512.Create(0.41421356237309503));
        var s = Vector512.ConditionalSelect(isUpper, (t - Vector512<double>.One) / (t + Vector512<double>.One), t);
        var q = s * s;
        var p = Vector512.Create(-0.017803896394812564);
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(0.03796390316111083));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(-0.05035049795312439));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(0.05846866752275139));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(-0.06662950246036792));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(0.07692045194561481));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(-0.09090896801472813));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(0.11111110744657099));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(-0.14285714279244968));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(0.19999999999940837));
        p = Vector512.FusedMultiplyAdd(p, q, Vector512.Create(-0.3333333333333312));
        p = Vector512.FusedMultiplyAdd(p * q, s, s);
        var quarter = Vector512.Create(0.7853981633974483);
        p = Vector512.ConditionalSelect(isUpper, quarter + p, p);
        p = Vector512.ConditionalSelect(isLarge, Vector512.Create(1.5707963267948966) - p, p);
        return WithSignOf(p, u);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Erf(Vector512<double> u)
    {
        var magnitude = Vector512.Abs(u);
        var q = u * u;
        // |u| ≤ 1: u times a polynomial in u².
        var near = Vector512.Create(-7.795898827002142e-10);
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(1.3720064546777686e-08));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(-1.6208483801871705e-07));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(1.6447424703317362e-06));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(-1.492473690741966e-05));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(0.00012055294904839707));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(-0.0008548325975389692));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(0.0052239776071164225));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(-0.02686617064323777));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(0.11283791670945006));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(-0.37612638903183543));
        near = Vector512.FusedMultiplyAdd(near, q, Vector512.Create(1.1283791670955126)) * u;
        // 1 < |u| ≤ 6: 1 − e^(−u²) times a polynomial in s = 14.4/(|u| + 3) − 2.6, which runs from 1 to −1. Past 6 the answer is 1 to rounding.
        var inside = Vector512.Min(Vector512.Max(magnitude, Vector512<double>.One), Vector512.Create(6.0));
        var s = Vector512.Create(14.4) / (inside + Vector512.Create(3.0)) - Vector512.Create(2.6);
        var far = Vector512.Create(-1.6799777159311457e-13);
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(-4.468786282795809e-15));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(6.716060821011204e-12));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(-6.030100178315267e-12));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(-2.5809703293704675e-10));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(2.6378817019432074e-10));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(1.1340261055840323e-08));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(4.526722197970927e-09));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(-5.541277438329464e-07));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(-2.4255574811020284e-06));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(1.956358330834969e-05));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(0.00033160296057845436));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(0.0024793146970724187));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(0.012713147695691995));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(0.0496984454033948));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(0.15436117429436919));
        far = Vector512.FusedMultiplyAdd(far, s, Vector512.Create(0.20798329133342885));
        far = Vector512<double>.One - far * Exp(-(inside * inside));
        return Vector512.ConditionalSelect(Vector512.GreaterThan(magnitude, Vector512<double>.One), WithSignOf(far, u), near);
    }

    /// <summary>u^v with the meaning of <see cref="Math.Pow"/>, one lane at a time: exp(v log u) loses digits and signs.</summary>
    [MethodImpl(MethodImplOptions.NoInlining)]
    public static Vector512<double> Power(Vector512<double> u, Vector512<double> v)
    {
        Span<double> lanes = stackalloc double[Vector512<double>.Count];
        for (var i = 0; i < lanes.Length; i++)
            lanes[i] = Math.Pow(u[i], v[i]);
        return Vector512.Create<double>(lanes);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> WithSignOf(Vector512<double> magnitude, Vector512<double> sign)
        => Vector512.CopySign(magnitude, sign);
}
