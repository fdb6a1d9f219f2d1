using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>Second-order JKO steps by backward differences of two steps (BDF2), in one dimension.</summary>
/// <remarks>
/// <para>ρₙ₊₁ minimises W2²(ρ, ρₙ)/(Mτ) − W2²(ρ, ρₙ₋₁)/(4Mτ) + F(ρ). In quantile coordinates, where W2 is an L2 norm, that is one JKO step of length
/// 2τ/3 from the extrapolated nodes (4xₙ − xₙ₋₁)/3, which need not be in order; for steps τ and τ/ω it is one of length τ(1 + ω)/(1 + 2ω) from
/// ((1 + ω)² xₙ − ω² xₙ₋₁)/(1 + 2ω). The first step of a run is a JKO step. Parcels, nodes, walls and iterations as in <see cref="JkoScheme"/>.</para>
/// <para>Order: 2 in τ on smooth problems, 2 in the cell width. Kept exactly: mass, positivity, equilibrium. Not kept: the free energy may rise, as it
/// may overshoot after a long first step; long steps damp a mode by 1/(2λτ) a step instead of 1/(λτ)², with oscillation. Cost of a step: that of a
/// JKO step. Prefer it to <see cref="JkoScheme"/> for accuracy in time on smooth starts; after a start with jumps the order shows only once they
/// are smoothed out. Iterations and residual as in <see cref="JkoScheme"/>.</para>
/// <para>Source: D. Matthes, S. Plazotta, A variational formulation of the BDF2 method for metric gradient flows, ESAIM: M2AN 53 (2019) 145-172; S. Plazotta,
/// A BDF2-approach for the non-linear Fokker-Planck equation, DCDS-A 39 (2019) 2893-2913. Departure: variable steps.</para>
/// </remarks>
/// <param name="parcels">Number of parcels aimed at, 128 to 1,000,000; null for four a cell.</param>
public sealed class JkoBdf2Scheme(int? parcels = null) : FlowScheme
{
    private readonly int? parcels = QuantileMesh.RequireParcels(parcels);

    /// <inheritdoc/>
    public override SchemeTraits Traits { get; } = new(
        "jko-bdf2", "Second-order JKO steps by backward differences over two steps.",
        OrderInTime: 2, OrderInSpace: 2, DecreasesFreeEnergy: false, KeepsEquilibrium: true, Dimensions: [1],
        "D. Matthes, S. Plazotta, ESAIM: M2AN 53 (2019) 145-172");

    /// <inheritdoc/>
    protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team)
        => new QuantileRun(problem, start, team, QuantileMesh.ParcelsFor(problem.Grid, parcels), QuantileRule.Bdf2, Traits.Name);
}
