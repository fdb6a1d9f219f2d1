using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The Metropolis-adjusted Langevin algorithm (MALA): an ULA step as proposal, accepted or refused so that π stays the law.
/// </summary>
/// <remarks>
/// No step bias at long times, at any step; before, its walkers are slower than the flow by the share of refusals, and no scheme on the grid carries their law.
/// An acceptance of about 0.57 explores fastest in high dimension; for walkers that follow the flow in time keep it near 1. Cost: as ULA, one value of V
/// and one exponential number more. Source: G. O. Roberts, R. L. Tweedie, Bernoulli 2 (1996) 341-363.
/// </remarks>
public sealed class MetropolisLangevin : Sampler
{
    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "mala", "Metropolis-adjusted Langevin: explicit proposals, accepted so that equilibrium is exact.", null, null,
        "G. O. Roberts, R. L. Tweedie, Bernoulli 2 (1996) 341-363");

    /// <inheritdoc/>
    /// <exception cref="InputException">V has a jump, or the start cannot be drawn.</exception>
    public override EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        RecipeSampler.RefuseJumps(problem, Traits.Name);
        return new MetropolisRun(false, problem, walkers, seed, team);
    }
}
