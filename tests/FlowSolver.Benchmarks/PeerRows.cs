namespace FlowSolver.Benchmarks;

/// <summary>
/// What <c>-- peers</c> and <c>-- growth</c> run. To add a comparison: keep its row as a static member of the benchmark class that owns the
/// work, add the script to <c>peers/</c>, and name the row here.
/// </summary>
internal static class PeerRows
{
    public static IReadOnlyList<PeerRow> Peers { get; } =
    [
        ExactFlowBenchmarks.Peer,
        RelaxationBenchmarks.Peer,
        GaussianBenchmarks.Peer,
        JkoLineBenchmarks.Peer,
        JkoPlaneBenchmarks.Middle,
        JkoPlaneBenchmarks.Large,
        PlaneTransportBenchmarks.Peer,
        .. LangevinBenchmarks.Peers,
    ];

    public static IReadOnlyList<GrowthRow> Growth { get; } =
    [
        ExactFlowBenchmarks.Growth,
        JkoLineBenchmarks.Growth,
        JkoPlaneBenchmarks.Growth,
        PlaneTransportBenchmarks.Growth,
    ];
}
