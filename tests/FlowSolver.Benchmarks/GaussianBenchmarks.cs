using BenchmarkDotNet.Attributes;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Benchmarks;

/// <summary>Gaussian convolution of a field, and the splitting step that ends in one.</summary>
[MemoryDiagnoser]
public class GaussianBenchmarks
{
    private const int Cells = 512;
    private const int Radius = 24;
    private double[] field = [];
    private GaussianConvolution convolution = null!;
    private FlowRun splitting = null!;

    /// <summary>The peer: the same deviation and radius, mirrored ends, one thread.</summary>
    public static PeerRow Peer { get; } = new(
        "gaussian", "Gaussian convolution of 512 x 512 cells, radius 24, one thread, against scipy.ndimage.gaussian_filter",
        8, "gaussian.py", TimeOurs, CompareWithPeer);

    [GlobalSetup]
    public void Setup()
    {
        field = Field();
        convolution = Prepared();
        var interval = new Interval(-2, 2);
        var problem = new GridProblem(
            new Problem(FormulaPotential.Parse("(x^2 - 1)^2 + 2*(y - x/2)^2", 2), 0.05, new Domain(interval, interval), new GaussianStart(-0.9, 0.02, 0.2, 0.02)),
            new Grid(new Axis(interval, Cells), new Axis(interval, Cells)));
        splitting = SplittingScheme.Proximal.Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
        splitting.Advance(0.01);
    }

    [Benchmark]
    public void Convolution512() => convolution.Apply(field, field, WorkerTeam.Alone);

    [Benchmark]
    public StepReport Splitting512() => splitting.Advance(0.01);

    private static double[] Field()
    {
        var random = new Random(7);
        var values = new double[Cells * Cells];
        for (var i = 0; i < values.Length; i++)
            values[i] = random.NextDouble();
        return values;
    }

    // The widest kernel of radius 24.
    private static double Variance()
    {
        var variance = Radius * (double)Radius / (-2 * Math.Log(GaussianKernel.Cutoff));
        Require.That(new GaussianKernel(variance).Radius == Radius, "The kernel must have the radius of the comparison.");
        return variance;
    }

    private static GaussianConvolution Prepared() => new(Cells, Cells, false, false, Variance(), Variance());

    private static double TimeOurs(PeerFolder folder)
    {
        var (values, result) = (Field(), new double[Cells * Cells]);
        folder.Write("field", values);
        folder.Write("shape", [Cells, Radius, Math.Sqrt(Variance())]);
        var prepared = Prepared();
        var seconds = PeerComparison.Time(30, () => prepared.Apply(values, result, WorkerTeam.Alone));
        folder.Write("ours", result);
        return seconds;
    }

    private static double CompareWithPeer(PeerFolder folder)
    {
        var (ours, peer) = (folder.Read("ours"), folder.Read("peer"));
        var worst = 0.0;
        for (var i = 0; i < ours.Length; i++)
            worst = Math.Max(worst, Math.Abs(ours[i] - peer[i]));
        return worst;
    }
}
