using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// The implicit Langevin chain: X′ = prox_{MτV}(X + √(2MTτ) ξ), that is, the implicit Euler method.
/// </summary>
/// <remarks>
/// Noise first, then the proximal step: the walkers end where V has been taken account of, which makes the bias smaller than with noise last. On a
/// quadratic V of curvature λ the stationary variance is (T/λ)/(1 + z/2), z = Mλτ. No step length makes it explode, and V may have kinks, where walkers
/// then rest. Cost: as <see cref="ProximalLangevin"/>. Source: M. Pereyra, Stat. Comput. 26 (2016) 745-760 (from memory).
/// </remarks>
public sealed class ImplicitLangevin : RecipeSampler
{
    /// <inheritdoc/>
    public override SplitRecipe Recipe => SplitRecipes.NoiseThenProximal;

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "noise-then-prox", "Implicit Langevin: noise, then implicit gradient step.", SplittingScheme.NoiseThenProximal, 1,
        "M. Pereyra, Stat. Comput. 26 (2016) 745-760 (from memory)");
}
