using FlowSolver.Foundation;

namespace FlowSolver.Tests.Foundation;

/// <summary>
/// Mutations tried and seen to fail: the recurrence of <see cref="Chebyshev.ScaledBesselI"/> with 2(k+1)/s for 2k/s; the normalising sum without the
/// orders above the last one; coefficients not doubled; one residue of the rational approximation changed in its tenth digit.
/// </summary>
public class ExponentialApproximationTests
{
    [Theory]
    [InlineData(0.01)]
    [InlineData(1)]
    [InlineData(30)]
    [InlineData(1e4)]
    [InlineData(1e6)]
    public void ExponentialCoefficients_SummedWithPolynomials_GiveTheExponential(double s)
    {
        double[] c = [];
        foreach (var tolerance in new[] { 1e-4, 1e-8, 1e-13 })
        {
            var count = Chebyshev.ExponentialCoefficients(s, tolerance, 0, ref c);
            foreach (var b in new[] { -1, -0.5, 0, 0.3, 0.9, 0.9999, 1 })
            {
                double before = 1, here = b, sum = c[0] + (count > 1 ? c[1] * b : 0);
                for (var k = 2; k < count; k++)
                {
                    (before, here) = (here, 2 * b * here - before);
                    sum += c[k] * here;
                }

                // Rounding of the recurrence at b = 1 grows with the number of terms.
                Assert.True(Math.Abs(sum - Math.Exp(s * (b - 1))) <= tolerance + 2e-15 * count, $"s {s}, b {b}, tolerance {tolerance}: {sum:r}");
            }
        }
    }

    [Fact]
    public void ExponentialCoefficients_FewerTerms_MissTheTolerance()
    {
        double[] c = [];
        var count = Chebyshev.ExponentialCoefficients(200, 1e-6, 0, ref c);
        double sum = 0;
        for (var k = 0; k < count - 1; k++)
            sum += c[k];
        Assert.True(1 - sum > 1e-6, "The last coefficient was not needed.");
    }

    [Fact]
    public void ExponentialCoefficients_GrowingNorm_TakesMoreTerms()
    {
        double[] c = [];
        var plain = Chebyshev.ExponentialCoefficients(200, 1e-10, 0, ref c);
        var growing = Chebyshev.ExponentialCoefficients(200, 1e-10, 0.1, ref c);
        Assert.True(growing > plain);
        // What is left out, weighted, by a much longer expansion.
        var all = new double[600];
        Chebyshev.ScaledBesselI(200, all);
        double left = 0;
        for (var k = growing; k < all.Length; k++)
            left += 2 * all[k] * Math.Exp(0.1 * k);
        Assert.InRange(left, 0, 1e-10);
    }

    [Theory]
    [InlineData(0.5)]
    [InlineData(40)]
    [InlineData(12345.6)]
    public void ScaledBesselI_ShortSpan_AgreesWithLongOne(double s)
    {
        var few = new double[3];
        var many = new double[2000];
        Chebyshev.ScaledBesselI(s, few);
        Chebyshev.ScaledBesselI(s, many);
        for (var k = 0; k < few.Length; k++)
            Assert.Equal(many[k], few[k], 1e-14 * many[0]);
        var sum = many[0];
        for (var k = 1; k < many.Length; k++)
            sum += 2 * many[k];
        Assert.Equal(1, sum, 1e-12);
    }

    [Fact]
    public void ScaledBesselI_FarOrders_UnderflowWithoutNoise()
    {
        var values = new double[1000];
        Chebyshev.ScaledBesselI(2, values);
        Assert.All(values, value => Assert.True(value >= 0 && double.IsFinite(value)));
        // I_20(2)/20! scaling: the leading term of the series, 1/20!·(1 + 1/21 + 1/(2·21·22)), decides to all digits.
        var leading = 1.0;
        for (var k = 1; k <= 20; k++)
            leading /= k;
        Assert.Equal(1, values[20] / (Math.Exp(-2) * leading * (1 + 1 / 21.0 + 1 / (2 * 21 * 22.0) + 1 / (6 * 21 * 22 * 23.0))), 1e-6);
    }

    [Fact]
    public void RationalExponential_WholeNegativeAxis_StaysWithinRounding()
    {
        for (var k = -80; k <= 120; k++)
        {
            var z = -Math.Pow(10, k / 10.0);
            Assert.Equal(Math.Exp(z), RationalExponential.At(z), 2e-14);
        }

        Assert.Equal(1, RationalExponential.At(0), 2e-14);
    }
}
