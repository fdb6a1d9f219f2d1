namespace FlowSolver.Foundation;

/// <summary>
/// Symmetric weights on a lattice of unit spacing that stand for a normal density: w₋ᴿ … w₀ … wᴿ, all above 0, of sum 1. Immutable.
/// </summary>
/// <remarks>
/// From a deviation of 1.3 spacings on, the normal density is sampled: the sum of the samples then misses by 2·exp(−2π²·1.3²) ≈ 6e-15 before it is scaled, and the variance by 4e-13 of itself (Poisson
/// summation). Below that the weights are those of the heat equation on the lattice, wₙ = e^(−a) Iₙ(a) with a the variance, whose sum and
/// variance are exact (T. Lindeberg, IEEE Trans. Pattern Anal. Mach. Intell. 12 (1990) 234-254); their fourth cumulant is a and not 0, an
/// error of second order in the spacing. Weights below <see cref="Cutoff"/> of the middle one are left out.
/// </remarks>
public sealed class GaussianKernel
{
    /// <summary>Least deviation, in spacings, from which on the density is sampled.</summary>
    public const double SampledFrom = 1.3;

    /// <summary>Share of the middle weight below which weights are left out: far below rounding, so that the tails of what is smoothed stay right relative to themselves.</summary>
    public const double Cutoff = 1e-30;

    /// <summary>Builds the weights.</summary>
    /// <param name="variance">Variance in squared spacings, not below 0. At 0 the only weight is 1.</param>
    /// <param name="cutoff">See <see cref="Cutoff"/>; between 0 and 1.</param>
    /// <exception cref="ArgumentOutOfRangeException">The variance is negative or not finite, or so large that the weights do not fit in memory.</exception>
    public GaussianKernel(double variance, double cutoff = Cutoff)
    {
        Variance = Require.NotNegative(variance);
        Require.That(cutoff is > 0 and < 1, $"cutoff was {cutoff}; it must be between 0 and 1.");
        Require.That(variance < 1e14, $"variance was {variance}; it must be below 1e14 squared spacings.");
        IsSampled = Math.Sqrt(variance) >= SampledFrom;
        var half = variance == 0 ? [1.0] : IsSampled ? Sampled(variance, cutoff) : Lattice(variance, cutoff);
        var sum = 0.0;
        for (var n = half.Length - 1; n >= 1; n--)
            sum += 2 * half[n];
        sum += half[0];
        Radius = half.Length - 1;
        weights = new double[2 * Radius + 1];
        for (var n = 0; n <= Radius; n++)
            weights[Radius - n] = weights[Radius + n] = half[n] / sum;
    }

    private readonly double[] weights;

    /// <summary>Variance asked for, in squared spacings.</summary>
    public double Variance { get; }

    /// <summary>R: the weights reach from −R to R.</summary>
    public int Radius { get; }

    /// <summary>Whether the weights are samples of the normal density (otherwise they are the lattice's own heat kernel).</summary>
    public bool IsSampled { get; }

    /// <summary>All weights, the middle one at <see cref="Radius"/>.</summary>
    public ReadOnlySpan<double> Weights => weights;

    private static double[] Sampled(double variance, double cutoff)
    {
        var half = new double[1 + (int)Math.Ceiling(Math.Sqrt(-2 * variance * Math.Log(cutoff)))];
        for (var n = 0; n < half.Length; n++)
            half[n] = Math.Exp(-0.5 * n * (double)n / variance);
        return half;
    }

    // Miller's backward recursion I(n−1) = I(n+1) + (2n/a) I(n), scaled at the end by the sum (F. Olver et al., NIST Handbook of Mathematical
    // Functions, 2010, §10.74(iv)). The ratio I(n+1)/I(n) stays below a/(2n+2), so that a start at n = 60 is far beyond the cutoff for a < 1.7.
    private static double[] Lattice(double a, double cutoff)
    {
        const int start = 60;
        var ratio = new double[start + 2];
        for (var n = start; n >= 0; n--)
            ratio[n] = a / (2 * (n + 1) + a * ratio[n + 1]);
        var half = new List<double> { 1 };
        for (var n = 0; n < start && half[^1] * ratio[n] >= cutoff; n++)
            half.Add(half[^1] * ratio[n]);
        return [.. half];
    }
}
