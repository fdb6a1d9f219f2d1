using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The proximal Metropolis-adjusted Langevin algorithm: a proximal step and noise as proposal, accepted or refused so that π stays the law.
/// </summary>
/// <remarks>
/// As <see cref="MetropolisLangevin"/>, for potentials with kinks or with gradients that grow faster than linearly, where explicit proposals are nearly always
/// refused. Source: M. Pereyra, Proximal Markov chain Monte Carlo algorithms, Stat. Comput. 26 (2016) 745-760.
/// </remarks>
public sealed class ProximalMetropolisLangevin : Sampler
{
    /// <inheritdoc/>
    public override SamplerTraits Traits { get; } = new(
        "proximal-mala", "Metropolis-adjusted Langevin with proximal proposals: equilibrium is exact, kinks allowed.", null, null,
        "M. Pereyra, Stat. Comput. 26 (2016) 745-760");

    /// <inheritdoc/>
    /// <exception cref="InputException">V has a jump, or the start cannot be drawn.</exception>
    public override EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        RecipeSampler.RefuseJumps(problem, Traits.Name);
        return new MetropolisRun(true, problem, walkers, seed, team);
    }
}
