using BenchmarkDotNet.Attributes;
using FlowSolver.Ensembles;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Benchmarks;

/// <summary>One step of a million walkers in V = x⁴/4 − x²/2, sampler by sampler, on one thread; and the draws below them.</summary>
[MemoryDiagnoser]
public class LangevinBenchmarks
{
    private const int Walkers = 1_000_000;
    private const double Step = 0.02;
    private readonly double[] numbers = new double[4096];
    private EnsembleRun run = null!;

    /// <summary>The peer does the same step with NumPy's vectorised operations, the proximal ones with a vectorised Newton iteration to the same tolerance.</summary>
    internal static IReadOnlyList<PeerRow> Peers { get; } =
        [.. SamplerCatalogue.All.Select((sampler, row) => new PeerRow(
            "sampler-" + sampler.Traits.Name, $"A step of {Walkers} walkers by {sampler.Traits.Name}, one thread, against NumPy's vectorised loop.",
            sampler.Traits.Name == "ula" ? 10 : 8, "langevin.py", folder =>
            {
                // Tells the script which of its loops to run.
                folder.Write("row", [row]);
                return SecondsOfStep(sampler);
            }))];

    public static IEnumerable<string> Names => SamplerCatalogue.All.Select(sampler => sampler.Traits.Name);

    [ParamsSource(nameof(Names))]
    public string Name { get; set; } = "ula";

    private static Problem DoubleWell { get; } = new(
        FormulaPotential.Parse("x^4/4 - x^2/2", 1), 0.5, new Domain(new Interval(-4, 4)), new GaussianStart(0, 0.5));

    [GlobalSetup]
    public void Prepare() => run = SamplerCatalogue.Find(Name)!.Begin(DoubleWell, Walkers, 1, WorkerTeam.Alone);

    [Benchmark(OperationsPerInvoke = Walkers)]
    public EnsembleReport WalkerStep() => run.Advance(Step);

    [Benchmark(OperationsPerInvoke = 4096)]
    public void NormalNumber() => new NormalDraws(1, 2, 3).Fill(0, numbers);

    private static double SecondsOfStep(Sampler sampler)
    {
        var run = sampler.Begin(DoubleWell, Walkers, 1, WorkerTeam.Alone);
        // The steps of the sampler with decreasing ones are whole for the first thirty.
        return PeerComparison.Time(sampler is DecreasingStepLangevin ? 12 : 60, () => run.Advance(Step));
    }
}
