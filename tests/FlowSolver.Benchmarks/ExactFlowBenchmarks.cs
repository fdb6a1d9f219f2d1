using System.Diagnostics;
using BenchmarkDotNet.Attributes;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;

namespace FlowSolver.Benchmarks;

/// <summary>The exact flow on a coupled double well.</summary>
[MemoryDiagnoser]
public class ExactFlowBenchmarks
{
    private WorkerTeam team = null!;
    private FlowRun line = null!;
    private FlowRun plane = null!;

    /// <summary>The peer: the same matrix, start and end time.</summary>
    public static PeerRow Peer { get; } = new(
        "exact-flow", "exact flow in 2-D, 512 x 512 cells, to t = 1 at 1e-8, against scipy.sparse.linalg.expm_multiply on the same matrix",
        8, "exact_flow.py", TimeOurs, CompareWithPeer);

    /// <summary>Seconds a cell and matrix product.</summary>
    public static GrowthRow Growth { get; } = new(
        "exact-flow", "exact flow in 2-D: processor seconds a cell and matrix product, by cells along an axis", 1.5, [128, 256, 512, 1024], CostOfCellProduct);

    [GlobalSetup]
    public void Setup()
    {
        team = new WorkerTeam(Environment.ProcessorCount);
        var axis = new Axis(new Interval(-2, 2), 512);
        var onLine = new GridProblem(new Problem(new DoubleWellLine(), 0.05, new Domain(axis.Interval), new GaussianStart(-0.9, 0.02)), new Grid(axis));
        line = new ExactFlowScheme().Begin(onLine, StartOnGrid.Create(onLine.Problem.Start, onLine.Grid), team);
        var onPlane = PlaneProblem(512);
        plane = new ExactFlowScheme().Begin(onPlane, StartOnGrid.Create(onPlane.Problem.Start, onPlane.Grid), team);
    }

    [GlobalCleanup]
    public void Cleanup() => team.Dispose();

    [Benchmark]
    public StepReport Line512() => line.Advance(0.1);

    [Benchmark]
    public StepReport Plane512() => plane.Advance(0.01);

    internal static GridProblem PlaneProblem(int cells)
    {
        var interval = new Interval(-2, 2);
        return new GridProblem(
            new Problem(new DoubleWellPlane(), 0.05, new Domain(interval, interval), new GaussianStart(-0.9, 0.02, 0.2, 0.02)),
            new Grid(new Axis(interval, cells), new Axis(interval, cells)));
    }

    private static double TimeOurs(PeerFolder folder)
    {
        using var team = new WorkerTeam(Environment.ProcessorCount);
        var problem = PlaneProblem(512);
        var start = StartOnGrid.Create(problem.Problem.Start, problem.Grid);
        var generator = new Generator(problem, team);
        folder.Write("shape", [512, 1]);
        folder.Write("right", generator.RateRight);
        folder.Write("left", generator.RateLeft);
        folder.Write("up", generator.RateUp);
        folder.Write("down", generator.RateDown);
        folder.Write("start", start.Values);
        var scheme = new ExactFlowScheme { Tolerance = 1e-8 };
        // Setting up the rates counts as our work; the peer is handed its matrix.
        return PeerComparison.Time(2, () =>
        {
            using var run = scheme.Begin(problem, start, team);
            run.Advance(1);
            folder.Write("ours", run.Snapshot().Values);
        });
    }

    private static double CompareWithPeer(PeerFolder folder)
    {
        var (ours, peer) = (folder.Read("ours"), folder.Read("peer"));
        var sum = 0.0;
        for (var i = 0; i < ours.Length; i++)
            sum += Math.Abs(ours[i] - peer[i]);
        return sum * 16 / ours.Length;
    }

    // Processor time of one thread: flatness is a matter of caches, and other programs on the machine must not count.
    private static double CostOfCellProduct(int cells)
    {
        var problem = PlaneProblem(cells);
        using var run = new ExactFlowScheme().Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
        // About the same number of products, 110, at every size.
        var time = 0.06 * (512.0 / cells) * (512.0 / cells);
        run.Advance(time);
        var least = double.PositiveInfinity;
        var begin = Stopwatch.GetTimestamp();
        while (Stopwatch.GetElapsedTime(begin).TotalSeconds < 2)
        {
            var before = Environment.CpuUsage.TotalTime;
            var products = run.Advance(time).Iterations;
            least = Math.Min(least, (Environment.CpuUsage.TotalTime - before).TotalSeconds / products);
        }

        return least / problem.Grid.CellCount;
    }

    private sealed class DoubleWellLine : Potential
    {
        public override int Dimension => 1;

        public override string Description => "x^4/4 - x^2/2";

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = x[i] * x[i] * (0.25 * x[i] * x[i] - 0.5);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
                gradientX[i] = x[i] * (x[i] * x[i] - 1);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, []);
            for (var i = 0; i < x.Length; i++)
                target.HessianXX[i] = 3 * x[i] * x[i] - 1;
        }
    }

    private sealed class DoubleWellPlane : Potential
    {
        public override int Dimension => 2;

        public override string Description => "x^4/4 - x^2/2 + (y - x/2)^2";

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = x[i] * x[i] * (0.25 * x[i] * x[i] - 0.5) + (y[i] - 0.5 * x[i]) * (y[i] - 0.5 * x[i]);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
            {
                gradientX[i] = x[i] * (x[i] * x[i] - 1) - (y[i] - 0.5 * x[i]);
                gradientY[i] = 2 * (y[i] - 0.5 * x[i]);
            }
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, target.GradientY);
            for (var i = 0; i < x.Length; i++)
            {
                target.HessianXX[i] = 3 * x[i] * x[i] - 0.5;
                target.HessianXY[i] = -1;
                target.HessianYY[i] = 2;
            }
        }
    }
}
