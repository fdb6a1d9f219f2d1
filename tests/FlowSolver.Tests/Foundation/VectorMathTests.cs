using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Tests.Foundation;

/// <summary>
/// The stated errors were measured against 48-digit values; here the platform's own functions (themselves within one unit) stand in, so the
/// bounds are the stated ones plus one, rounded up.
/// Mutation tried: the coefficient 0.2222219855403849 of the logarithm changed in its fifth digit; Log_Range_WithinTwoUnits failed.
/// </summary>
public class VectorMathTests
{
    private static void AssertUnits(double expected, double found, double units, double at)
    {
        if (double.IsNaN(expected) || double.IsInfinity(expected) || expected == 0)
        {
            Assert.Equal(expected, found);
            return;
        }

        var unit = Math.BitIncrement(Math.Abs(expected)) - Math.Abs(expected);
        Assert.True(Math.Abs(found - expected) <= units * unit, $"at {at:R}: {found:R} against {expected:R}, {(found - expected) / unit} units");
    }

    private static double[] Sweep(double from, double to, int count)
    {
        var values = new double[count];
        for (var i = 0; i < count; i++)
            values[i] = from + (to - from) * ((i + 0.5) / count);
        return values;
    }

    private static double[] Map(double[] x, Action<double[], double[]> function)
    {
        var y = new double[x.Length];
        function(x, y);
        return y;
    }

    [Theory]
    [InlineData(-1, 1)]
    [InlineData(-708, 709.7)]
    [InlineData(-20, 20)]
    public void Exp_Range_WithinTwoUnits(double from, double to)
    {
        var x = Sweep(from, to, 20011);
        var y = Map(x, (a, b) => VectorMath.Exp(a, b));
        for (var i = 0; i < x.Length; i++)
            AssertUnits(Math.Exp(x[i]), y[i], 2, x[i]);
    }

    [Fact]
    public void Exp_EdgeCases_FollowMath()
    {
        double[] x = [0, -0.0, double.Epsilon, 709.78, 710, 1e300, double.PositiveInfinity, -745, -746, -1e300, double.NegativeInfinity, double.NaN, -720.25, -744.4];
        var y = Map(x, (a, b) => VectorMath.Exp(a, b));
        for (var i = 0; i < x.Length; i++)
            AssertUnits(Math.Exp(x[i]), y[i], 2, x[i]);
    }

    [Fact]
    public void Log_Range_WithinTwoUnits()
    {
        foreach (var x in new[] { Sweep(0, 3, 30011), Sweep(0.99, 1.01, 10007), [.. Sweep(-700, 700, 9973).Select(Math.Exp)] })
        {
            var y = Map(x, (a, b) => VectorMath.Log(a, b));
            for (var i = 0; i < x.Length; i++)
                AssertUnits(Math.Log(x[i]), y[i], 2, x[i]);
        }
    }

    [Fact]
    public void Log_EdgeCases_FollowMath()
    {
        double[] x = [1, 0, -0.0, -1, double.NaN, double.PositiveInfinity, double.NegativeInfinity, double.Epsilon, 1e-310, double.MaxValue, 2.2250738585072014e-308];
        var y = Map(x, (a, b) => VectorMath.Log(a, b));
        for (var i = 0; i < x.Length; i++)
            AssertUnits(Math.Log(x[i]), y[i], 2, x[i]);
    }

    [Theory]
    [InlineData(-4, 4)]
    [InlineData(-1e5, 1e5)]
    [InlineData(-9e8, 9e8)]
    public void SinCos_Range_WithinThreeUnits(double from, double to)
    {
        var x = Sweep(from, to, 20011);
        var sin = Map(x, (a, b) => VectorMath.Sin(a, b));
        var cos = Map(x, (a, b) => VectorMath.Cos(a, b));
        for (var i = 0; i < x.Length; i++)
        {
            AssertUnits(Math.Sin(x[i]), sin[i], 3, x[i]);
            AssertUnits(Math.Cos(x[i]), cos[i], 3, x[i]);
        }
    }

    [Fact]
    public void SinCos_EdgeCases_FollowMath()
    {
        double[] x = [0, double.Epsilon, 1e-300, Math.PI, Math.PI / 2, 1e6 * Math.PI, 1e15, 1e300, double.PositiveInfinity, double.NegativeInfinity, double.NaN];
        var sin = Map(x, (a, b) => VectorMath.Sin(a, b));
        var cos = Map(x, (a, b) => VectorMath.Cos(a, b));
        for (var i = 0; i < x.Length; i++)
        {
            AssertUnits(Math.Sin(x[i]), sin[i], 3, x[i]);
            AssertUnits(Math.Cos(x[i]), cos[i], 3, x[i]);
        }
    }

    [Fact]
    public void SinCosTurn_MultiplesOfAnEighth_AreExact()
    {
        var half = Math.Sqrt(0.5);
        double[] sines = [0, half, 1, half, 0, -half, -1, -half];
        foreach (var whole in new[] { 0.0, -3, 1e9, 140737488355328.0 })
        {
            for (var i = 0; i < 8; i++)
            {
                var (sin, cos) = VectorMath.SinCosTurn(Vector512.Create(whole + i / 8.0));
                AssertUnits(sines[i], sin[0], 2, i);
                AssertUnits(sines[(i + 2) % 8], cos[0], 2, i);
            }
        }
    }

    [Fact]
    public void SinCosTurn_Range_WithinThreeUnits()
    {
        foreach (var u in Sweep(-0.125, 0.125, 20011))
        {
            var (sin, cos) = VectorMath.SinCosTurn(Vector512.Create(u));
            // |2πu| ≤ π/4: rounding the argument costs the platform's value one unit more.
            AssertUnits(Math.Sin(2 * Math.PI * u), sin[3], 4, u);
            AssertUnits(Math.Cos(2 * Math.PI * u), cos[3], 3, u);
        }
    }

    [Fact]
    public void SinCosTurn_EdgeCases_AreNaNOrWhole()
    {
        var (sin, cos) = VectorMath.SinCosTurn(Vector512.Create(double.NaN, double.PositiveInfinity, double.NegativeInfinity, 1e300, -1e18, 0, 0.25, 1e16));
        for (var i = 0; i < 3; i++)
            Assert.True(double.IsNaN(sin[i]) && double.IsNaN(cos[i]));
        Assert.Equal(new[] { 1.0, 1, 1, 0, 1 }, new[] { cos[3], cos[4], cos[5], cos[6], cos[7] });
        Assert.Equal(new[] { 0.0, 0, 0, 1, 0 }, new[] { sin[3], sin[4], sin[5], sin[6], sin[7] });
    }

    [Fact]
    public void Span_AnyLengthAndPlace_SameBytes()
    {
        var x = Sweep(0.1, 50, 67);
        var whole = Map(x, (a, b) => VectorMath.Exp(a, b));
        for (var length = 0; length < 20; length++)
        {
            var part = new double[length];
            VectorMath.Exp(x.AsSpan(7, length), part);
            Assert.Equal(whole.AsSpan(7, length).ToArray(), part);
        }

        VectorMath.Exp(x, x);
        Assert.Equal(whole, x);
        Assert.Throws<ArgumentException>(() => VectorMath.Log(new double[3], new double[4]));
    }
}
