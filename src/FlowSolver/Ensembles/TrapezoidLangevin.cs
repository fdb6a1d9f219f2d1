using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// Half an explicit step, noise, half a proximal step: Y = X − (Mτ/2)∇V(X) + √(2MTτ) ξ, X′ = prox_{(Mτ/2)V}(Y).
/// </summary>
/// <remarks>
/// The two halves are adjoint to each other, so that the bias is of second order in τ on smooth problems; on a quadratic V the stationary variance is
/// exactly T/λ for every step. The explicit half blows up where Mτλ &gt; 4. Cost: one gradient, one proximal map, one normal number an axis. Source:
/// adjoint composition after E. Hairer, C. Lubich, G. Wanner, Geometric Numerical Integration, 2nd ed. 2006, §II.3 (from memory).
/// </remarks>
public sealed class TrapezoidLangevin : RecipeSampler
{
    /// <inheritdoc/>
    public override SplitRecipe Recipe => SplitRecipes.HalfGradientNoiseHalfProximal;

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "half-explicit-half-prox", "Half an explicit step, noise, half an implicit step.", SplittingScheme.Trapezoid, 2,
        "Adjoint composition: E. Hairer, C. Lubich, G. Wanner, Geometric Numerical Integration, 2nd ed. 2006, §II.3 (from memory)");
}
