using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>JKO steps with the exact W2 distance.</summary>
public sealed class JkoScheme : FlowScheme
{
    /// <summary>Creates the scheme.</summary>
    /// <param name="dualGapTolerance">In two dimensions, the largest duality gap of a step relative to W2²/(2τ) that passes; above 0.</param>
    public JkoScheme(double dualGapTolerance = 1e-2) => DualGapTolerance = Require.Positive(dualGapTolerance);

    /// <summary>The largest relative duality gap that passes.</summary>
    public double DualGapTolerance { get; }

    /// <inheritdoc/>
    public override SchemeTraits Traits { get; } = new(
        "jko", "Jordan-Kinderlehrer-Otto steps with the exact Wasserstein distance; in two dimensions each step is certified by a duality gap.",
        1, 2, true, true, [2], "R. Jordan, D. Kinderlehrer, F. Otto, SIAM J. Math. Anal. 29 (1998) 1-17");

    /// <inheritdoc/>
    protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team)
        => new JkoPlaneRun(problem, start, team, DualGapTolerance);
}
