using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Schemes.Jko;
using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Schemes;

/// <summary>Every scheme by its name in a case file. One row a scheme.</summary>
public static class SchemeCatalogue
{
    private static readonly FlowScheme[] Rows =
    [
        new ExactFlowScheme(),
        new JkoScheme(),
        new JkoBdf2Scheme(),
        new JkoMidpointScheme(),
        SplittingScheme.Proximal,
        SplittingScheme.Gradient,
        SplittingScheme.StrangNoiseFlowNoise,
        SplittingScheme.StrangFlowNoiseFlow,
        SplittingScheme.Trapezoid,
    ];

    /// <summary>All schemes, in the order in which tables and figures show them.</summary>
    public static IReadOnlyList<FlowScheme> All => Rows;

    /// <summary>Finds a scheme; null when there is none of that name.</summary>
    public static FlowScheme? Find(string name) => Array.Find(Rows, row => row.Traits.Name == name);
}
