using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// The unadjusted Langevin algorithm: X′ = X − Mτ∇V(X) + √(2MTτ) ξ.
/// </summary>
/// <remarks>
/// Bias of first order in τ: on a quadratic V of curvature λ the stationary variance is (T/λ)/(1 − z/2), z = Mλτ. Blows up where z &gt; 2, and from any
/// step on where V grows faster than quadratically; both are found and named (walls keep walkers in, but not the law). Cost: one gradient and one
/// normal number an axis. Source: A. Durmus, É. Moulines, Bernoulli 25 (2019) 2854-2882; Euler-Maruyama's method for the Langevin equation.
/// </remarks>
public sealed class UnadjustedLangevin : RecipeSampler
{
    /// <inheritdoc/>
    public override SplitRecipe Recipe => SplitRecipes.GradientThenNoise;

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "ula", "Unadjusted Langevin: explicit gradient step, then noise.", SplittingScheme.Gradient, 1,
        "A. Durmus, É. Moulines, Bernoulli 25 (2019) 2854-2882");
}
