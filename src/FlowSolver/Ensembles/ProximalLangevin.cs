using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// The proximal unadjusted Langevin algorithm: X′ = prox_{MτV}(X) + √(2MTτ) ξ. No step length makes it explode, and V may have kinks.
/// </summary>
/// <remarks>
/// Bias of first order in τ: on a quadratic V of curvature λ the stationary variance is (T/λ)(1 + z)²/(1 + z/2), z = Mλτ. Its law is one proximal
/// transport step followed by the heat flow, that is, JKO's functional split in two. Cost: a few values of V with derivatives
/// (<see cref="ProximalMap"/>) and one normal number an axis. Source: A. Durmus, S. Majewski, B. Miasojedow, J. Mach. Learn. Res. 20 (73) (2019) 1-46.
/// </remarks>
public sealed class ProximalLangevin : RecipeSampler
{
    /// <inheritdoc/>
    public override SplitRecipe Recipe => SplitRecipes.ProximalThenNoise;

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "proximal-ula", "Proximal Langevin: implicit gradient step, then noise.", SplittingScheme.Proximal, 1,
        "A. Durmus, S. Majewski, B. Miasojedow, J. Mach. Learn. Res. 20 (73) (2019) 1-46");
}
