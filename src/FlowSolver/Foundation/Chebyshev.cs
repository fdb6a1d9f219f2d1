namespace FlowSolver.Foundation;

/// <summary>Expansion of the exponential in Chebyshev polynomials, and the scaled Bessel functions that are its coefficients.</summary>
/// <remarks>
/// For B with spectrum in [−1, 1], e^(s(B−1)) = Σ_k c_k T_k(B) with c_0 = e^(−s)I_0(s) and c_k = 2e^(−s)I_k(s): all positive, of sum 1
/// (M. Abramowitz, I. Stegun, Handbook of Mathematical Functions, NBS AMS 55 (1964), 9.6.34; H. Tal-Ezer, SIAM J. Numer. Anal. 23 (1986) 11-26,
/// for the use in time, from memory).
/// </remarks>
public static class Chebyshev
{
    /// <summary>Writes e^(−s)·I_k(s) for k = 0, 1, …: relative accuracy near machine precision down to underflow.</summary>
    /// <remarks>
    /// Ratios I_k/I_(k−1) by their backward recurrence from far above, which damps its starting error, then products, normalised by
    /// I_0 + 2ΣI_k = e^s (J. Miller's algorithm as in W. Gautschi, SIAM Rev. 9 (1967) 24-82). Nothing over- or underflows on the way.
    /// </remarks>
    /// <param name="argument">s, not below 0.</param>
    /// <param name="values">Receives the values, index = order k.</param>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="argument"/> is negative or not finite.</exception>
    public static void ScaledBesselI(double argument, Span<double> values)
    {
        Require.NotNegative(argument);
        if (values.Length == 0)
            return;
        if (argument == 0)
        {
            values.Clear();
            values[0] = 1;
            return;
        }

        // Orders above the last one asked for still belong to the sum that normalises, as long as they count at all.
        var last = values.Length - 1;
        var top = Math.Max(OrderBelow(argument, 0, -45), last);
        var ratio = RatioEstimate(top + 1, argument);
        for (var k = top; k > last; k--)
            ratio = 1 / (2 * k / argument + ratio);
        // Σ_{k > last} I_k / I_last, built from above in the same pass would need the ratios again; it is summed below from I_last up.
        for (var k = last; k >= 1; k--)
        {
            ratio = 1 / (2 * k / argument + ratio);
            values[k] = ratio;
        }

        values[0] = 1;
        var sum = 0.0;
        for (var k = 1; k <= last; k++)
        {
            values[k] *= values[k - 1];
            sum += values[k];
        }

        if (top > last)
            sum += values[last] * SumAbove(last, top, argument);
        SpanKernels.Scale(values, 1 / (1 + 2 * sum));
    }

    /// <summary>
    /// Writes the coefficients c_0 … c_K of e^(s(B−1)), with K such that Σ_{k&gt;K} c_k e^(k·growth) ≤ <paramref name="tolerance"/>.
    /// </summary>
    /// <param name="s">Half the length of the spectrum times time, not below 0.</param>
    /// <param name="tolerance">Bound on what is left out, above 0; a bound on the error in every norm in which |T_k(B)| ≤ e^(k·growth).</param>
    /// <param name="growth">Growth of the polynomials per order, not below 0; 0 for a symmetric B.</param>
    /// <param name="coefficients">Receives them; replaced by a longer array when too short, otherwise kept.</param>
    /// <returns>K + 1, the number of coefficients.</returns>
    public static int ExponentialCoefficients(double s, double tolerance, double growth, ref double[] coefficients)
    {
        Require.NotNegative(s);
        Require.Positive(tolerance);
        Require.NotNegative(growth);
        ArgumentNullException.ThrowIfNull(coefficients);
        var top = OrderBelow(s, growth, Math.Log(tolerance) - 4);
        if (coefficients.Length < top + 1)
            coefficients = new double[top + 1 + top / 4];
        var all = coefficients.AsSpan(0, top + 1);
        ScaledBesselI(s, all);
        for (var k = 1; k <= top; k++)
            all[k] *= 2;
        // What lies above the last coefficient computed is below e⁻⁴ of the tolerance.
        var left = 0.02 * tolerance;
        var count = top + 1;
        while (count > 1)
        {
            left += all[count - 1] * Math.Exp(Math.Min(600, (count - 1) * growth));
            if (left > tolerance)
                break;
            count--;
        }

        return count;
    }

    // Smallest order above which log(2e^(−s)I_k(s)) + k·growth has fallen below the given level, by the upper bound on the ratios of
    // D. Amos, Math. Comp. 28 (1974) 239-251: I_k/I_(k−1) ≤ s / (k − 1/2 + √((k − 1/2)² + s²)).
    private static int OrderBelow(double s, double growth, double level)
    {
        if (s == 0)
            return 0;
        var log = Math.Min(0, -0.5 * Math.Log(Math.Max(s, 1e-300) * Math.PI / 2)) + growth;
        var k = 0;
        while (true)
        {
            k++;
            var step = Math.Log(s / (k - 0.5 + Math.Sqrt((k - 0.5) * (k - 0.5) + s * s))) + growth;
            log += step;
            // Only past the top of the growing terms does a small one promise that the rest is smaller.
            if (step < 0 && log - Math.Log(-step) < level)
                return k;
        }
    }

    private static double RatioEstimate(int k, double s) => s / (k + Math.Sqrt((double)k * k + s * s));

    private static double SumAbove(int last, int top, double argument)
    {
        // Horner from above: I_(k+1)/I_k · (1 + I_(k+2)/I_(k+1) · (1 + …)).
        var ratio = RatioEstimate(top + 1, argument);
        var nested = 0.0;
        for (var k = top; k > last; k--)
        {
            ratio = 1 / (2 * k / argument + ratio);
            nested = ratio * (1 + nested);
        }

        return nested;
    }
}
