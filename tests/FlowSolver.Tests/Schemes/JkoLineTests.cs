using FlowSolver.Schemes;
using FlowSolver.Schemes.Jko;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Schemes;

/// <summary>The conformance suite on the line, default number of parcels. Mutation tried: dropping the bend of the equilibrium from the Hessian; the Newton steps stall.</summary>
public class JkoLineConformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new OnLineOnly(new JkoScheme());

    protected override double StationaryTolerance => 1e-12;
}

/// <summary>The conformance suite of BDF2 steps. Mutation tried: weights 3/2 and 1/2 in place of 4/3 and 1/3 lower the order to 1.</summary>
public class JkoBdf2Conformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new JkoBdf2Scheme();

    protected override double StationaryTolerance => 1e-12;
}

/// <summary>The conformance suite of midpoint steps. Mutation tried: stopping at 1.9 times the half step lowers the order to 1.</summary>
public class JkoMidpointConformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new JkoMidpointScheme();

    protected override double StationaryTolerance => 1e-12;
}
