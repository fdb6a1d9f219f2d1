using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Schemes;

namespace FlowSolver.Tests.Support;

/// <summary>A scheme for both dimensions, tried in one only: conformance with tolerances of its own, without paying for the plane.</summary>
public sealed class OnLineOnly(FlowScheme scheme) : FlowScheme
{
    public override SchemeTraits Traits { get; } = scheme.Traits with { Dimensions = [1] };

    protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team) => scheme.Begin(problem, start, team);
}
