using FlowSolver.Schemes;
using FlowSolver.Schemes.Jko;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Schemes;

public class JkoLineTests : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new OnLineOnly(new JkoScheme());
}
