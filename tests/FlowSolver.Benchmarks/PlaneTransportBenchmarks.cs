using BenchmarkDotNet.Attributes;
using FlowSolver.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Benchmarks;

/// <summary>W2 in the plane: far, near and compact pairs on 512 × 512 cells, their parts, and a noise floor.</summary>
[MemoryDiagnoser]
public class PlaneTransportBenchmarks
{
    private WorkerTeam team = null!;
    private Density start = null!;
    private Density far = null!;
    private Density near = null!;
    private Density box = null!;
    private Density movedBox = null!;
    private Density law = null!;
    private double[] potential = null!;
    private double[] values = null!;
    private CTransform transform = null!;
    private CosineTransform cosine = null!;

    /// <summary>One Poisson solve (a cosine transform pair with a division between) against the pair alone.</summary>
    public static PeerRow Peer { get; } = new(
        "cosine-solve", "one Poisson solve by cosine transforms, 512 x 512 cells, one thread, against scipy.fft.dctn + idctn",
        1, "cosine_pairs.py", TimeOurs);

    /// <summary>Seconds a cell for two far Gaussians.</summary>
    public static GrowthRow Growth { get; } = new(
        "plane-transport", "W2 of two far Gaussians: seconds a cell, by cells along an axis", 2, [128, 256, 512], CostOfCell);

    [GlobalSetup]
    public void Setup()
    {
        team = new WorkerTeam(Environment.ProcessorCount);
        var grid = Square(512);
        (start, far) = FarPair(512);
        near = StartOnGrid.Create(new GaussianStart(-1.2 + 1e-4, 0.1, -1, 0.2001, 0.05), grid);
        box = Box(grid, -2);
        movedBox = Box(grid, 1);
        law = StartOnGrid.Create(new GaussianStart(0, 0.64, 0, 0.36), new Grid(new Axis(new Interval(-4, 4), 128), new Axis(new Interval(-3, 3), 96)));
        potential = grid.Sample((x, y, value) =>
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = 0.3 * x[i] * x[i] + Math.Sin(y[i]);
        });
        values = new double[grid.CellCount];
        transform = new CTransform(grid, 1, team);
        cosine = new CosineTransform(512, 512, false, false, team);
    }

    [GlobalCleanup]
    public void Cleanup() => team.Dispose();

    [Benchmark]
    public TransportBracket FarGaussians512() => PlaneTransport.Between(start, far, team);

    [Benchmark]
    public TransportBracket NearGaussians512() => PlaneTransport.Between(start, near, team);

    [Benchmark]
    public TransportBracket BoxAcross512() => PlaneTransport.Between(box, movedBox, team);

    [Benchmark]
    public void CTransform512() => transform.Apply(potential, values);

    [Benchmark]
    public void CosineSolve512() => cosine.Solve(values, 1, 1);

    [Benchmark]
    public double NoiseFloor200Draws() => PlaneNoiseFloor.Simulate(law, 100_000, 200, 1, team).Mean;

    private static Grid Square(int cells) => new(new Axis(new Interval(-4, 4), cells), new Axis(new Interval(-4, 4), cells));

    private static Density Box(Grid grid, double left)
        => new Density(grid, grid.Sample((x, y, value) =>
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = x[i] > left && x[i] < left + 1 && Math.Abs(y[i]) < 0.7 ? 1 : 0;
        })).Normalised();

    private static (Density From, Density To) FarPair(int cells)
    {
        var grid = Square(cells);
        return (StartOnGrid.Create(new GaussianStart(-1.2, 0.1, -1, 0.2, 0.05), grid), StartOnGrid.Create(new GaussianStart(1.2, 0.3, 0.8, 0.1, -0.05), grid));
    }

    private static double CostOfCell(int cells)
    {
        using var team = new WorkerTeam(Environment.ProcessorCount);
        var (from, to) = FarPair(cells);
        return PeerComparison.Time(3, () => PlaneTransport.Between(from, to, team)) / (cells * cells);
    }

    private static double TimeOurs(PeerFolder folder)
    {
        const int cells = 512;
        folder.Write("shape", [cells, 1]);
        File.WriteAllText(Path.Combine(folder.Path, "name.txt"), "cosine-solve");
        var field = new double[cells * cells];
        var random = new Random(1);
        foreach (ref var value in field.AsSpan())
            value = random.NextDouble();
        var solver = new CosineTransform(cells, cells, false, false, WorkerTeam.Alone);
        return PeerComparison.Time(15, () => solver.Solve(field, 1, 1));
    }
}
