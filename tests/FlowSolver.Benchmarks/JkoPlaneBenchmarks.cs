using FlowSolver.Formulas;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Jko;

namespace FlowSolver.Benchmarks;

/// <summary>A certified JKO step in the plane, in the middle of a run, against cosine transforms of the same grid.</summary>
internal static class JkoPlaneBenchmarks
{
    private const double Step = 0.02;

    /// <summary>512², against 100 transform pairs on one thread.</summary>
    public static PeerRow Middle { get; } = new(
        "jko-plane-512", "one certified JKO step at 512², middle of a run, two threads, against 100 pairs of scipy.fft.dctn and idctn of that grid on one thread",
        1, "cosine_pairs.py", folder => Ours(folder, "jko-plane-512", 512, 100));

    /// <summary>1024², against 130 transform pairs.</summary>
    public static PeerRow Large { get; } = new(
        "jko-plane-1024", "the same at 1024², against 130 pairs",
        1, "cosine_pairs.py", folder => Ours(folder, "jko-plane-1024", 1024, 130));

    /// <summary>Seconds a cell from 128² to 1024².</summary>
    public static GrowthRow Growth { get; } = new(
        "jko-plane", "one certified JKO step in the middle of a run, seconds a cell", 1.6, [128, 256, 512, 1024], cells => Seconds(cells) / ((double)cells * cells));

    private static double Ours(PeerFolder folder, string name, int cells, int pairs)
    {
        File.WriteAllText(Path.Combine(folder.Path, "name.txt"), name);
        folder.Write("shape", [cells, pairs]);
        return Seconds(cells);
    }

    // The first three steps are left out: extrapolation from the steps before starts with the third.
    private static double Seconds(int cells)
    {
        var domain = new Domain(new Interval(-3.5, 3.5), new Interval(-3, 3));
        var grid = new Grid(new Axis(domain.X, cells), new Axis(domain.Y!, cells));
        var start = new GaussianStart(-0.6, 0.16, 0.4, 0.2, 0.05);
        var problem = new Problem(new FormulaPotential(Formula.Parse("(-0.5*x^2 + 0.6*x*y + y^2)/2 + 0.125*(x^4+y^4)", 2)), 0.5, domain, start);
        using var team = new WorkerTeam(Math.Min(2, Environment.ProcessorCount));
        using FlowRun run = new JkoScheme().Begin(new GridProblem(problem, grid), StartOnGrid.Create(start, grid), team);
        run.Advance(Step);
        run.Advance(Step);
        return PeerComparison.Time(cells > 512 ? 3 : 5, () =>
        {
            if (run.Advance(Step).Failure is { } failure)
                throw new InvalidOperationException(failure);
        });
    }
}
