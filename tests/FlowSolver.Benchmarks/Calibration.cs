using System.Globalization;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Studies;

namespace FlowSolver.Benchmarks;

/// <summary>
/// How often audits flag right samples (calibration) and find wrong ones (power), as a Markdown table:
/// <c>dotnet run -c Release --project tests/FlowSolver.Benchmarks -- calibration &gt; tests/FlowSolver.Benchmarks/calibration.md</c>.
/// </summary>
internal static class Calibration
{
    private static readonly TimePlan Plan = TimePlan.Even(0.05, 2, 5);

    public static int Run()
    {
        using var team = new WorkerTeam(Environment.ProcessorCount);
        var line = new Problem(FormulaPotential.Parse("x^2/2", 1), 1, new Domain(new Interval(-7, 7)), new GaussianStart(1, 0.25));
        var lineGrid = new Grid(new Axis(line.Domain.X, 400));
        var plane = new Problem(FormulaPotential.Parse("x^2/2 + y^2/2", 2), 1, new Domain(new Interval(-5, 5), new Interval(-5, 5)), new GaussianStart(1, 0.25, 0, 0.25));
        var planeGrid = new Grid(new Axis(plane.Domain.X, 48), new Axis(plane.Domain.Y!, 48));
        Console.WriteLine("# Calibration and power of the audit");
        Console.WriteLine();
        Console.WriteLine("Made by `dotnet run -c Release --project tests/FlowSolver.Benchmarks -- calibration`; seeds are fixed, so it repeats.");
        Console.WriteLine();
        Console.WriteLine("Right samples: share of 400 audits with p < 0.05. Between 0.03 and 0.07 is within two standard errors of 0.05.");
        Console.WriteLine();
        Console.WriteLine("| samples | size | simulated sets | share flagged |");
        Console.WriteLine("| --- | --- | --- | --- |");
        Calibrate("independent, 1-D", 2000, 400, k => Audit(line, lineGrid, Normals(2000, 0, 1, k), null, k, false, team));
        Calibrate("one chain, 1-D, autocorrelation time 9", 4000, 400, k => Audit(line, lineGrid, Chain(4000, 0.8, k), null, k, true, team));
        Calibrate("independent, 2-D", 1000, 400, k => Audit(plane, planeGrid, Normals(1000, 0, 1, k), Normals(1000, 0, 1, k + 50_000), k, false, team));
        Console.WriteLine();
        Console.WriteLine("Wrong samples: share of 100 audits with p < 0.05.");
        Console.WriteLine();
        Console.WriteLine("| fault | size | share found |");
        Console.WriteLine("| --- | --- | --- |");
        Power("variance 6 % too large", 20_000, k => Audit(line, lineGrid, Normals(20_000, 0, Math.Sqrt(1.06), k), null, k, false, team));
        Power("mean off by 3 % of a deviation", 40_000, k => Audit(line, lineGrid, Normals(40_000, 0.03, 1, k), null, k, false, team));
        Power("ULA at step × curvature = 0.1", 50_000, k => Audit(line, lineGrid, Normals(50_000, 0, Math.Sqrt(1 / 0.95), k), null, k, false, team));
        var wells = new Problem(FormulaPotential.Parse("x^4/4 - x^2/2", 1), 0.1, new Domain(new Interval(-2.2, 2.2)), new GaussianStart(-1, 0.04));
        var wellsGrid = new Grid(new Axis(wells.Domain.X, 400));
        Power("double well, one well 1 % (0.51 of the mass) too heavy", 100_000, k => Audit(wells, wellsGrid, Wells(wells, wellsGrid, 100_000, 0.51, k), null, k, false, team));
        return 0;
    }

    private static void Calibrate(string name, int size, int audits, Func<uint, double> pValue)
    {
        var flagged = 0;
        for (uint k = 0; k < audits; k++)
            flagged += pValue(1000 + k) < 0.05 ? 1 : 0;
        Console.WriteLine(string.Create(CultureInfo.InvariantCulture, $"| {name} | {size} | 199 | {(double)flagged / audits:f4} |"));
    }

    private static void Power(string name, int size, Func<uint, double> pValue)
    {
        var found = 0;
        for (uint k = 0; k < 100; k++)
            found += pValue(5000 + k) < 0.05 ? 1 : 0;
        Console.WriteLine(string.Create(CultureInfo.InvariantCulture, $"| {name} | {size} | {found / 100.0:f2} |"));
    }

    private static double Audit(Problem problem, Grid grid, double[] x, double[]? y, uint seed, bool isChain, WorkerTeam team)
        => SamplerAudit.Run(problem, grid, Plan, [new AuditSamples("set", null, x, y)],
            new AuditOptions { IsChain = isChain, NoiseDraws = 199, Seed = seed, SeeksCause = false }, team)[0].PValue ?? 1;

    private static double[] Normals(int count, double mean, double deviation, uint seed)
    {
        var values = new double[count];
        new NormalDraws(seed, 7777).Fill(0, values);
        for (var i = 0; i < count; i++)
            values[i] = mean + deviation * values[i];
        return values;
    }

    private static double[] Chain(int count, double coefficient, uint seed)
    {
        var chain = Normals(count, 0, 1, seed);
        for (var k = 1; k < count; k++)
            chain[k] = coefficient * chain[k - 1] + Math.Sqrt(1 - coefficient * coefficient) * chain[k];
        return chain;
    }

    // Draws of the equilibrium on the grid, right half taken with the given share.
    private static double[] Wells(Problem problem, Grid grid, int count, double share, uint seed)
    {
        var quantile = new Transport.QuantileFunction(new GridProblem(problem, grid).Equilibrium);
        var values = new double[count];
        new UniformDraws(seed, 7778).Fill(0, values);
        for (var i = 0; i < count; i++)
        {
            // Below 1 − share: the left well's half of the quantiles, stretched; above: the right well's.
            var u = values[i];
            values[i] = quantile.Position(u < 1 - share ? 0.5 * u / (1 - share) : 0.5 + 0.5 * (u - (1 - share)) / share);
        }

        return values;
    }
}
