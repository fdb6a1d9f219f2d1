using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>The JKO step: ρₙ₊₁ minimises W2²(ρ, ρₙ)/(2Mτ) + F(ρ), with the Wasserstein-2 distance itself.</summary>
/// <remarks>
/// <para>Two dimensions: see <see cref="JkoPlaneRun"/>. In one dimension W2 is the L2 distance of quantile functions. The start is cut into N parcels of fixed mass m_j (see
/// <see cref="Parcels"/>) between nodes x₀ &lt; … &lt; x_N, and a step minimises
/// Σ μ_j (x_j − x_jⁿ)²/(2Mτ) + T Σ m_j log(m_j/w_j), where w_j is the equilibrium's mass between nodes j and j + 1 and μ_j half the masses beside node j.
/// The second sum is exactly F − F(π) of the density that is a multiple of the equilibrium in every parcel; it is least, and 0, when every parcel
/// is a quantile of the equilibrium, so that the equilibrium is left alone to rounding whatever N.</para>
/// <para>Order: 1 in τ; 2 in the cell width and in 1/N on smooth problems. Kept exactly: mass, positivity, equilibrium, decay of the free energy
/// (of the parcels; W2² ≤ 2Mτ(Fₙ − Fₙ₊₁)). The state stays in quantile coordinates between steps: writing the density to the grid does not feed back.
/// At walls the end nodes stand still, since after any step mass reaches them; on a circle all nodes are free. Non-convex V: the step found is a
/// local minimiser, and a step beyond the bound of uniqueness, 1 + Mτ min V″ ≤ 0, is said to be so.</para>
/// <para>Cost: 3 to 8 Newton steps of O(N), some tens after a start with jumps. Iterations are Newton steps; the residual is the length of the last
/// one, √(Mτ·decrement²), which bounds its W2 length (1e-8 of the axis at most; the error left is its square). Prefer it where the step itself is the
/// object, or where a large stable step with the right equilibrium is wanted.</para>
/// <para>Source: R. Jordan, D. Kinderlehrer, F. Otto, SIAM J. Math. Anal. 29 (1998) 1-17; quantile coordinates and Newton's method as in
/// A. Blanchet, V. Calvez, J. A. Carrillo, SIAM J. Numer. Anal. 46 (2008) 691-721 (from memory). Departure: the entropy is taken relative to the
/// equilibrium inside each parcel.</para>
/// </remarks>
public sealed class JkoScheme : FlowScheme
{
    /// <summary>Creates the scheme.</summary>
    /// <param name="dualGapTolerance">In two dimensions, the largest duality gap of a step relative to W2²/(2τ) that passes; above 0.</param>
    /// <param name="parcels">In one dimension, the number of parcels aimed at, 128 to 1,000,000; null for four a cell.</param>
    public JkoScheme(double dualGapTolerance = 1e-2, int? parcels = null)
    {
        DualGapTolerance = Require.Positive(dualGapTolerance);
        Parcels = QuantileMesh.RequireParcels(parcels);
    }

    /// <summary>The largest relative duality gap that passes in two dimensions.</summary>
    public double DualGapTolerance { get; }

    /// <summary>The number of parcels aimed at in one dimension; null for four a cell.</summary>
    public int? Parcels { get; }

    /// <inheritdoc/>
    public override SchemeTraits Traits { get; } = new(
        "jko", "Jordan-Kinderlehrer-Otto steps with the exact Wasserstein distance; in two dimensions each step is certified by a duality gap.",
        OrderInTime: 1, OrderInSpace: 2, DecreasesFreeEnergy: true, KeepsEquilibrium: true, Dimensions: [1, 2],
        "R. Jordan, D. Kinderlehrer, F. Otto, SIAM J. Math. Anal. 29 (1998) 1-17");

    /// <inheritdoc/>
    protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team)
        => problem.Grid.Dimension == 1
            ? new QuantileRun(problem, start, team, QuantileMesh.ParcelsFor(problem.Grid, Parcels), QuantileRule.ImplicitEuler, Traits.Name)
            : new JkoPlaneRun(problem, start, team, DualGapTolerance);
}
