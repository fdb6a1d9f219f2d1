using FlowSolver.Foundation;

namespace FlowSolver.Schemes.Splitting;

/// <summary>The ways to move probability along −∇V during a substep of length t (times the mobility).</summary>
public enum TransportMap
{
    /// <summary>x ↦ x − t∇V(x).</summary>
    Gradient,

    /// <summary>x ↦ prox_{tV}(x), the minimiser of |y − x|²/(2t) + V(y).</summary>
    Proximal,

    /// <summary>x ↦ the point that ẋ = −∇V(x) reaches after time t.</summary>
    Characteristic,
}

/// <summary>One part of a step: either transport by a map or Gaussian noise, for a fraction of the step.</summary>
/// <param name="Map">The map; null for noise.</param>
/// <param name="Fraction">Share of the step τ, above 0 and at most 1.</param>
public readonly record struct SplitPart(TransportMap? Map, double Fraction)
{
    /// <summary>Noise of variance 2·M·T·fraction·τ on each axis: on the grid a Gaussian convolution, for a walker a normal number.</summary>
    public static SplitPart Noise(double fraction = 1) => new(null, fraction);

    /// <summary>Transport for fraction·τ.</summary>
    public static SplitPart Transport(TransportMap map, double fraction = 1) => new(map, fraction);
}

/// <summary>
/// A step of operator splitting as data: its parts, first one first. The same recipe drives the scheme on the grid and the sampler of which that
/// scheme is the law, which is what makes the two comparable to sampling noise.
/// </summary>
public sealed class SplitRecipe
{
    /// <summary>States a recipe.</summary>
    /// <exception cref="ArgumentException">There are no parts, or a fraction is out of range.</exception>
    public SplitRecipe(params ReadOnlySpan<SplitPart> parts)
    {
        Require.That(parts.Length > 0, "The recipe had no parts; it must have at least one.");
        foreach (var part in parts)
            Require.That(part.Fraction is > 0 and <= 1, $"The fraction of a part was {part.Fraction}; it must be above 0 and at most 1.");
        Parts = parts.ToArray();
    }

    /// <summary>The parts, first one first.</summary>
    public IReadOnlyList<SplitPart> Parts { get; }
}
