using BenchmarkDotNet.Attributes;
using FlowSolver.Foundation;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Studies;

namespace FlowSolver.Benchmarks;

/// <summary>Slow modes of a coupled double well.</summary>
[MemoryDiagnoser]
public class RelaxationBenchmarks
{
    private const int Modes = 10;
    private WorkerTeam team = null!;

    /// <summary>The peer: the same matrix in its symmetric form, the same number of modes.</summary>
    public static PeerRow Peer { get; } = new(
        "relaxation", "ten slow modes in 2-D, 512 x 512 cells, against scipy.sparse.linalg.eigsh (shift-invert) on the same matrix",
        5, "relaxation.py", TimeOurs, CompareWithPeer);

    [GlobalSetup]
    public void Setup() => team = new WorkerTeam(Environment.ProcessorCount);

    [GlobalCleanup]
    public void Cleanup() => team.Dispose();

    [Benchmark]
    public NetworkModes Plane256() => Relaxation.FindModes(new Generator(ExactFlowBenchmarks.PlaneProblem(256), team), Modes, 1e-6, team);

    private static double TimeOurs(PeerFolder folder)
    {
        using var team = new WorkerTeam(Environment.ProcessorCount);
        var problem = ExactFlowBenchmarks.PlaneProblem(512);
        var generator = new Generator(problem, team);
        folder.Write("shape", [512, Modes]);
        folder.Write("right", generator.RateRight);
        folder.Write("left", generator.RateLeft);
        folder.Write("up", generator.RateUp);
        folder.Write("down", generator.RateDown);
        // Setting up the rates counts as our work; the peer is handed its matrix.
        return PeerComparison.Time(1, () =>
        {
            var found = Relaxation.FindModes(new Generator(problem, team), Modes, 1e-5, team);
            folder.Write("ours", found.Rates);
        });
    }

    // Largest relative difference of a rate.
    private static double CompareWithPeer(PeerFolder folder)
    {
        var (ours, peer) = (folder.Read("ours"), folder.Read("peer"));
        var largest = 0.0;
        for (var k = 0; k < ours.Length; k++)
            largest = Math.Max(largest, Math.Abs(ours[k] / peer[k] - 1));
        return largest;
    }
}
