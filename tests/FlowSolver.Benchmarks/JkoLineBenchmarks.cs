using FlowSolver.Formulas;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes.Jko;

namespace FlowSolver.Benchmarks;

/// <summary>A JKO step on the line in the middle of a run: Newton's method on 100,000 parcels.</summary>
internal static class JkoLineBenchmarks
{
    private const double Step = 0.02;
    private const double Temperature = 0.5;
    private const int StepsBefore = 10;

    /// <summary>Against the same Newton's method with NumPy and a banded solver.</summary>
    public static PeerRow Peer { get; } = new(
        "jko-line", "one JKO step with 100,000 parcels on 4096 cells, two threads, against the same minimisation by Newton's method with NumPy and scipy.linalg.solveh_banded",
        5, "jko_line.py", Ours, Disagreement, PeerThreads: 0);

    /// <summary>Seconds a parcel.</summary>
    public static GrowthRow Growth { get; } = new(
        "jko-line", "one JKO step in the middle of a run, seconds a parcel", 1.6, [10_000, 100_000, 1_000_000],
        parcels =>
        {
            using var team = new WorkerTeam(Math.Min(2, Environment.ProcessorCount));
            var run = Begin(parcels, team);
            return PeerComparison.Time(5, () => Advance(run)) / parcels;
        });

    // The least time of single steps from the same state: a run is begun again for each.
    private static double Ours(PeerFolder folder)
    {
        using var team = new WorkerTeam(Math.Min(2, Environment.ProcessorCount));
        var run = Begin(100_000, team);
        var masses = new double[run.Parcels];
        var nodes = new double[run.Parcels + 1];
        run.WriteParcels(masses, nodes);
        folder.Write("masses", masses);
        folder.Write("nodes", nodes);
        folder.Write("shape", [Step, Temperature, -3.5]);
        Advance(run);
        run.WriteParcels(masses, nodes);
        folder.Write("ours", nodes);
        return PeerComparison.Time(5, () => Advance(run));
    }

    private static double Disagreement(PeerFolder folder)
    {
        var (ours, peer, masses) = (folder.Read("ours"), folder.Read("peer"), folder.Read("masses"));
        var largest = 0.0;
        // Parcels in the far tails are where the two take the free energy differently.
        for (var j = 1; j < masses.Length; j++)
        {
            if (masses[j - 1] > 1e-8)
                largest = Math.Max(largest, Math.Abs(ours[j] - peer[j]));
        }

        return largest;
    }

    private static QuantileRun Begin(int parcels, WorkerTeam team)
    {
        var domain = new Domain(new Interval(-3.5, 3.5));
        var grid = new Grid(new Axis(domain.X, 4096));
        var start = new GaussianStart(-0.8, 0.16);
        var problem = new Problem(new FormulaPotential(Formula.Parse("x^4/4 - x^2/2 + 0.1*x", 1)), Temperature, domain, start);
        var run = (QuantileRun)new JkoScheme(parcels: parcels).Begin(new GridProblem(problem, grid), StartOnGrid.Create(start, grid), team);
        for (var k = 0; k < StepsBefore; k++)
            Advance(run);
        return run;
    }

    private static void Advance(QuantileRun run)
    {
        if (run.Advance(Step).Failure is { } failure)
            throw new InvalidOperationException(failure);
    }
}
