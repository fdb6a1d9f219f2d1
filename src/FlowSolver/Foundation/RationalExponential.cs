namespace FlowSolver.Foundation;

/// <summary>
/// The rational function of type (16, 16) that is nearest to e^z on the negative real axis: r(z) = r_∞ + 2 Re Σ_k a_k/(z − θ_k) over eight poles
/// in the upper half plane, with |e^z − r(z)| ≤ 2.2·10⁻¹⁶ for all z ≤ 0.
/// </summary>
/// <remarks>
/// One step e^(tA)v = r(tA)v costs eight complex solves whatever the size of t‖A‖. In double precision the terms cancel by two digits, so that
/// about 10⁻¹⁴ of the norm of v is what one may count on. Poles and residues: the Carathéodory-Fejér method of L. N. Trefethen,
/// J. A. C. Weideman, T. Schmelzer, BIT Numer. Math. 46 (2006) 653-670, carried out with 45 digits (110 Chebyshev coefficients of
/// e^(9(x−1)/(x+1)), Hankel eigenproblem, roots of its 17th eigenvector); the constant is the middle of the error's range.
/// </remarks>
public static class RationalExponential
{
    /// <summary>Number of poles in the upper half plane.</summary>
    public const int Poles = 8;

    /// <summary>r_∞, the value at z → −∞.</summary>
    public const double AtInfinity = 2.124955453881625e-16;

    /// <summary>Re θ_k; length <see cref="Poles"/>.</summary>
    public static ReadOnlySpan<double> PoleReal =>
    [
        6.416177699099436405, 5.948152268951179781, 4.993174737717998885, 3.509103608414920810,
        1.419375897185669143, -1.413928462488882432, -5.264971343442642125, -10.84391707869698155,
    ];

    /// <summary>Im θ_k, all above 1; length <see cref="Poles"/>.</summary>
    public static ReadOnlySpan<double> PoleImaginary =>
    [
        1.194122393370138807, 3.587457362018322738, 5.996881713603942933, 8.436198985884376209,
        10.92536348449672419, 13.49772569889274770, 16.22022147316793079, 19.27744616718165841,
    ];

    /// <summary>Re a_k; length <see cref="Poles"/>.</summary>
    public static ReadOnlySpan<double> ResidueReal =>
    [
        -64.50087802553977029, 113.3977517848395418, -62.51839246320807204, 15.05958527002351459,
        -1.479300711355807145, 0.04102313683541049531, 0.0002115174218246476689, -5.090152186521197105e-7,
    ];

    /// <summary>Im a_k; length <see cref="Poles"/>.</summary>
    public static ReadOnlySpan<double> ResidueImaginary =>
    [
        -224.5944076265214919, 101.9472170421588472, -11.19039109428329548, -5.751405277642183896,
        1.768658832378297347, -0.1574346617345551916, 0.004389296964738088796, -0.00002422001765285244707,
    ];

    /// <summary>r(z) for a real z ≤ 0, for checks.</summary>
    public static double At(double z)
    {
        var sum = 0.0;
        for (var k = 0; k < Poles; k++)
        {
            var (re, im) = (z - PoleReal[k], -PoleImaginary[k]);
            sum += (ResidueReal[k] * re + ResidueImaginary[k] * im) / (re * re + im * im);
        }

        return AtInfinity + 2 * sum;
    }
}
