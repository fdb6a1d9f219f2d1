using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// Half the noise, the flow of −∇V for Mτ, half the noise: symmetric splitting for walkers.
/// </summary>
/// <remarks>
/// Bias of second order in τ on smooth problems: on a quadratic V of curvature λ the stationary variance is (T/λ)·z·coth z, z = Mλτ. The flow is
/// integrated to rounding (<see cref="CharacteristicMap"/>), so that no step length makes it explode. Cost: at least seven gradients and two normal
/// numbers an axis. Source: G. Strang, SIAM J. Numer. Anal. 5 (1968) 506-517 (from memory).
/// </remarks>
public sealed class StrangLangevin : RecipeSampler
{
    /// <inheritdoc/>
    public override SplitRecipe Recipe => SplitRecipes.HalfNoiseFlowHalfNoise;

    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "half-noise-flow-half-noise", "Half the noise, the flow of the gradient, half the noise.", SplittingScheme.StrangNoiseFlowNoise, 2,
        "G. Strang, SIAM J. Numer. Anal. 5 (1968) 506-517 (from memory)");
}
