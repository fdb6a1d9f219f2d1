using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Schemes.ExactFlow;

public sealed class ExactFlowSchemeTests : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new ExactFlowScheme();

    // On 32 cells the start is narrower than two cells and enters as averages, on finer grids as centre values: the change between the two
    // is of the size of the error itself and would hide the order.
    protected override int[] CellsForOrder(int dimension) => dimension == 1 ? [64, 128, 256, 512] : [48, 96, 192];
}
