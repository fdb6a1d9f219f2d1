using FlowSolver.Schemes;
using FlowSolver.Schemes.Splitting;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Schemes;

/// <summary>
/// What the splitting schemes share. In two dimensions the orders in space begin at 64 cells: at 32 the start is narrower than two cells and held by averages, not by values at the centres.
/// For orders in time there are fewer cells and longer steps than the suite's own: the reference, 16 times finer, works on 3 × 3 finer cells of its own and takes most of the time.
/// </summary>
public abstract class SplittingConformance : FlowSchemeConformance
{
    protected override int CellsFor(int dimension) => dimension == 1 ? 256 : 48;

    protected override int[] CellsForOrder(int dimension) => dimension == 1 ? [64, 128, 256, 512] : [64, 128, 256];

    protected override int[] StepsForOrder => [3, 6, 12];
}

/// <summary>Mutation tried: noise of variance 2Tτ(1 + h) on each axis: order in space falls to 1.</summary>
public class ProximalSplittingTests : SplittingConformance
{
    protected override FlowScheme Scheme => SplittingScheme.Proximal;
}

/// <summary>Mutation tried: a mass whose weights reach into the next strip of rows put into its first strip alone.</summary>
public class GradientSplittingTests : SplittingConformance
{
    protected override FlowScheme Scheme => SplittingScheme.Gradient;
}

/// <summary>Mutation tried: the two halves of the noise given fractions 0.6 and 0.4: order in time falls to 1.</summary>
public class StrangNoiseFlowNoiseTests : SplittingConformance
{
    protected override FlowScheme Scheme => SplittingScheme.StrangNoiseFlowNoise;
}

/// <summary>Mutation tried: the pending half of the flow not carried out when the density is asked for: order in time falls to 1.</summary>
public class StrangFlowNoiseFlowTests : SplittingConformance
{
    protected override FlowScheme Scheme => SplittingScheme.StrangFlowNoiseFlow;
}

/// <summary>Mutation tried: gradient and proximal half exchanged in the second half alone (gradient/2, noise, gradient/2): order in time falls to 1.</summary>
public class TrapezoidSplittingTests : SplittingConformance
{
    protected override FlowScheme Scheme => SplittingScheme.Trapezoid;
}
