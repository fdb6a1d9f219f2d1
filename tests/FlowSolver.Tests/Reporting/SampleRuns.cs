using FlowSolver.Diagnostics;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Reporting;
using FlowSolver.Studies;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Reporting;

/// <summary>
/// Results written down from closed forms, so that writers can be looked at and tested without a solver: the Ornstein-Uhlenbeck flow of a
/// Gaussian, the recursions of the first-order steps on a quadratic potential, and Gaussian formulas for every diagnostic
/// (H. Risken, The Fokker-Planck Equation, 1989, section 5.3; the recursions follow from one step on a Gaussian).
/// </summary>
internal static class SampleRuns
{
    private const double Temperature = 0.4;
    private static readonly string[] FlowMethods = ["exact", "jko", "split-proximal", "split-gradient"];
    private static readonly string[] Samplers = ["ula", "proximal-ula"];

    public static CaseLabels Labels { get; } = new("µm", "kT", "s");

    public static RunProvenance Provenance { get; } = new()
    {
        CaseName = "bead",
        ResolvedCase = "title = \"bead\"\n[domain]\nx = { from = -3, to = 3, cells = 240, ends = \"reflecting\" }\n",
        Versions = new Dictionary<string, string> { ["flowsolver"] = "0.1.0", [".NET"] = "10.0" },
        Timings = new Dictionary<string, double> { ["flows"] = 0.25, ["ensembles"] = 0.5 },
        Sources = ["R. Jordan, D. Kinderlehrer, F. Otto, SIAM J. Math. Anal. 29 (1998) 1-17 <variational form>."],
        Warnings = ["The tail mass at the upper wall is 3e-7."],
    };

    /// <summary>A bead in one trap of stiffness 1 on a line.</summary>
    public static ComparisonResult Line(int cells = 240, int reports = 16, double step = 0.05)
        => Build(new Grid(new Axis(new Interval(-3, 3), cells)), new PolynomialPotential(0, 0, 0.5), reports, step, "A bead in one trap");

    /// <summary>Buoys in an oblong basin: stiffness 0.6 along x and 2 along y.</summary>
    public static ComparisonResult Plane(int cells = 96, int reports = 11, double step = 0.05)
        => Build(
            new Grid(new Axis(new Interval(-3, 3), cells), new Axis(new Interval(-2, 2), cells * 2 / 3)),
            new PlanePotential(0.6, 0, 2), reports, step, "Buoys in an oblong basin");

    /// <summary>The optimal map between two densities of the exact flow of <see cref="Plane"/>: affine, since both are Gaussian.</summary>
    public static TransportPicture Map(ComparisonResult plane, int fromReport, int toReport)
    {
        var grid = plane.Grid;
        var (from, to) = (Law(plane, "exact", fromReport), Law(plane, "exact", toReport));
        var dx = new double[grid.CellCount];
        var dy = new double[grid.CellCount];
        for (var i = 0; i < dx.Length; i++)
        {
            var (x, y) = (grid.X.Center(i % grid.Nx), grid.Y!.Center(i / grid.Nx));
            dx[i] = to.MeanX + Math.Sqrt(to.VarianceX / from.VarianceX) * (x - from.MeanX) - x;
            dy[i] = to.MeanY + Math.Sqrt(to.VarianceY / from.VarianceY) * (y - from.MeanY) - y;
        }

        var times = plane.Plan.ReportTimes;
        return new TransportPicture(
            FormattableString.Invariant($"exact flow, t = {Numbers.Short(times[fromReport])} to t = {Numbers.Short(times[toReport])}"), "exact", times[fromReport], times[toReport],
            plane.Densities[0].Densities[fromReport], dx, dy);
    }

    private static ComparisonResult Build(Grid grid, Potential potential, int reports, double step, string title)
    {
        var plane = grid.Dimension == 2;
        var domain = new Domain(grid.X.Interval, grid.Y?.Interval);
        var start = plane ? new GaussianStart(-1.5, 0.09, 0.9, 0.04, 0) : new GaussianStart(-1.5, 0.04);
        var problem = new Problem(potential, Temperature, domain, start, 1, title);
        var onGrid = new GridProblem(problem, grid);
        var plan = TimePlan.Even(step, 3, reports);
        var skeleton = new ComparisonResult
        {
            Problem = problem,
            Grid = grid,
            Plan = plan,
            Equilibrium = onGrid.Equilibrium,
            EquilibriumFreeEnergy = onGrid.EquilibriumFreeEnergy,
            Series = [],
            Steps = [],
            Budget = [],
            GridErrors = [.. Enumerable.Range(0, reports).Select(r => (double?)(2e-4 * Math.Exp(-0.7 * r / reports)))],
            Densities = [],
            Walkers = [],
            Remarks = [new Remark("split-gradient", null, "The step times the largest V'' is 0.05; the map does not fold.", false)],
            Work = [.. FlowMethods.Concat(Samplers).Select((method, i) => new WorkRow(method, 60, 60 * (i + 1), 0.01 * (i + 1)))],
            Estimators = new Dictionary<string, string> { ["w2_exact (ensembles)"] = "sorted walkers against quantiles of the exact flow" },
            WalkerCount = 20000,
            Seed = 1,
            Threads = 2,
            Interrupted = false,
        };
        var series = new List<SeriesRow>();
        var budget = new List<BudgetRow>();
        var steps = new List<StepRow>();
        for (var report = 0; report < reports; report++)
        {
            var time = plan.ReportTimes[report];
            var exact = Law(skeleton, "exact", report);
            foreach (var method in FlowMethods)
            {
                var law = Law(skeleton, method, report);
                var relative = RelativeEntropy(law, plane);
                series.Add(new SeriesRow(
                    time, method, SeriesKind.Flow, law, null, onGrid.EquilibriumFreeEnergy + Temperature * relative, relative, Fisher(law, plane),
                    plane ? Widened(Distance(law, exact)) : TransportBracket.Exact(Distance(law, exact)), Distance(law, exact) * 0.8));
                if (method == "jko" && report > 0)
                    steps.Add(new StepRow(method, report, time, 4, 1e-13, 3e-8, Distance(law, Law(skeleton, method, report - 1)), onGrid.EquilibriumFreeEnergy + Temperature * relative));
            }

            foreach (var sampler in Samplers)
            {
                var law = Law(skeleton, sampler == "ula" ? "split-gradient" : "split-proximal", report);
                var noise = 1.3 * Math.Sqrt((exact.VarianceX + exact.VarianceY) / 20000) * (1 + 0.15 * Math.Sin(7 * time + sampler.Length));
                var bias = Distance(law, exact);
                var total = Math.Sqrt(bias * bias + noise * noise);
                var wobbled = law with { MeanX = law.MeanX + 0.3 * noise };
                series.Add(new SeriesRow(time, sampler, SeriesKind.Ensemble, wobbled, null, null, null, null, TransportBracket.Exact(total), null));
                var floor = 1.3 * Math.Sqrt((exact.VarianceX + exact.VarianceY) / 20000);
                budget.Add(new BudgetRow(
                    time, sampler, total, bias, floor, 1.6 * floor, skeleton.GridErrors[report], total > 1.6 * floor ? 0.001 : 0.4,
                    total > 1.6 * floor ? "biased by the step" : "within noise"));
            }
        }

        return skeleton with
        {
            Series = series,
            Steps = steps,
            Budget = budget,
            Densities = [.. FlowMethods.Select(method => new DensityHistory(
                method, [.. Enumerable.Range(0, reports).Select(report => OnGrid(grid, Law(skeleton, method, report)))]))],
            Walkers = [.. Samplers.Select(sampler => WalkersOf(skeleton, sampler, reports))],
        };
    }

    private static TransportBracket Widened(double distance) => new(distance, 0.98 * distance, 1.01 * distance);

    private static WalkerHistory WalkersOf(ComparisonResult result, string sampler, int reports)
    {
        var x = new List<double[]>();
        var y = new List<double[]>();
        for (var report = 0; report < reports; report++)
        {
            var law = Law(result, sampler == "ula" ? "split-gradient" : "split-proximal", report);
            var random = new Random(report + 100 * sampler.Length);
            var xs = new double[400];
            var ys = new double[result.Grid.Dimension == 2 ? 400 : 0];
            for (var i = 0; i < xs.Length; i++)
            {
                xs[i] = law.MeanX + Math.Sqrt(law.VarianceX) * Normal(random);
                if (ys.Length > 0)
                    ys[i] = law.MeanY + Math.Sqrt(law.VarianceY) * Normal(random);
            }

            x.Add(xs);
            y.Add(ys);
        }

        return new WalkerHistory(sampler, x, y);
    }

    private static double Normal(Random random)
        => Math.Sqrt(-2 * Math.Log(1 - random.NextDouble())) * Math.Cos(2 * Math.PI * random.NextDouble());

    private static Moments Law(ComparisonResult result, string method, int report)
    {
        var plane = result.Grid.Dimension == 2;
        var start = (GaussianStart)result.Problem.Start;
        var (mx, vx) = Axis(start.MeanX, start.VarianceX, plane ? 0.6 : 1, method, result.Plan, report);
        if (!plane)
            return new Moments(1, mx, vx);
        var (my, vy) = Axis(start.MeanY, start.VarianceY, 2, method, result.Plan, report);
        return new Moments(1, mx, vx, my, vy);
    }

    private static (double Mean, double Variance) Axis(double mean, double variance, double stiffness, string method, TimePlan plan, int report)
    {
        var time = plan.ReportTimes[report];
        if (method == "exact")
        {
            var decay = Math.Exp(-stiffness * time);
            return (mean * decay, Temperature / stiffness + (variance - Temperature / stiffness) * decay * decay);
        }

        for (var r = 1; r <= report; r++)
        {
            var tau = plan.StepLengthBefore(r);
            for (var s = 0; s < plan.StepsBefore(r); s++)
            {
                var factor = method == "split-gradient" ? 1 - tau * stiffness : 1 / (1 + tau * stiffness);
                mean *= factor;
                if (method == "jko")
                {
                    // The step to deviation s solves (s − s_old)/τ + k s − T/s = 0.
                    var old = Math.Sqrt(variance);
                    var a = 1 / tau + stiffness;
                    var deviation = (old / tau + Math.Sqrt(old * old / (tau * tau) + 4 * a * Temperature)) / (2 * a);
                    variance = deviation * deviation;
                }
                else
                {
                    variance = factor * factor * variance + 2 * Temperature * tau;
                }
            }
        }

        return (mean, variance);
    }

    private static double Distance(Moments a, Moments b)
    {
        var sum = Square(a.MeanX - b.MeanX) + Square(Math.Sqrt(a.VarianceX) - Math.Sqrt(b.VarianceX))
            + Square(a.MeanY - b.MeanY) + Square(Math.Sqrt(a.VarianceY) - Math.Sqrt(b.VarianceY));
        return Math.Sqrt(sum);
    }

    private static double RelativeEntropy(Moments law, bool plane)
    {
        static double One(double mean, double variance, double equilibrium)
            => 0.5 * ((variance + mean * mean) / equilibrium - 1 - Math.Log(variance / equilibrium));
        return plane
            ? One(law.MeanX, law.VarianceX, Temperature / 0.6) + One(law.MeanY, law.VarianceY, Temperature / 2)
            : One(law.MeanX, law.VarianceX, Temperature);
    }

    private static double Fisher(Moments law, bool plane)
    {
        static double One(double mean, double variance, double equilibrium)
            => variance * Square(1 / equilibrium - 1 / variance) + Square(mean / equilibrium);
        return plane
            ? One(law.MeanX, law.VarianceX, Temperature / 0.6) + One(law.MeanY, law.VarianceY, Temperature / 2)
            : One(law.MeanX, law.VarianceX, Temperature);
    }

    private static Density OnGrid(Grid grid, Moments law)
    {
        var values = new double[grid.CellCount];
        for (var i = 0; i < values.Length; i++)
        {
            values[i] = Gauss(grid.X.Center(i % grid.Nx), law.MeanX, law.VarianceX);
            if (grid.Y is not null)
                values[i] *= Gauss(grid.Y.Center(i / grid.Nx), law.MeanY, law.VarianceY);
        }

        return new Density(grid, values);
    }

    private static double Gauss(double x, double mean, double variance)
        => Math.Exp(-Square(x - mean) / (2 * variance)) / Math.Sqrt(2 * Math.PI * variance);

    private static double Square(double value) => value * value;
}
