using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Schemes.Jko;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Schemes;

/// <summary>
/// JKO steps on the line and the circle. Mutations tried: the bend of the equilibrium left out of the Hessian (Newton's method needs twice the
/// iterations and fails where V is steep); half the mass at the lower node of each parcel only (order in the recursion of normal densities lost).
/// </summary>
public class JkoLineTests
{
    private static readonly Potential Wells = new PolynomialPotential(0, 0.1, -0.5, 0, 0.25);

    private static BatchFunction Of(Func<double, double> function) => (x, _, value) =>
    {
        for (var i = 0; i < x.Length; i++)
            value[i] = function(x[i]);
    };

    private static (GridProblem Problem, QuantileRun Run) Begin(
        Potential potential, double temperature, StartDensity start, AxisEnds ends = AxisEnds.Reflecting,
        int cells = 256, double halfWidth = 3.5, FlowScheme? scheme = null, double mobility = 1)
    {
        var problem = new Problem(potential, temperature, new Domain(new Interval(-halfWidth, halfWidth, ends)), start, mobility);
        var grid = new Grid(new Axis(problem.Domain.X, cells));
        var onGrid = new GridProblem(problem, grid);
        return (onGrid, (QuantileRun)(scheme ?? new JkoScheme()).Begin(onGrid, StartOnGrid.Create(start, grid), WorkerTeam.Alone));
    }

    public static IEnumerable<object[]> HardStarts =>
        from start in new[] { "box", "narrow", "two boxes", "wall", "step" }
        from step in new[] { 0.001, 0.02, 0.3 }
        select new object[] { start, step };

    private static FunctionStart Start(string name) => new(Of(name switch
    {
        "box" => x => Math.Abs(x + 0.8) < 0.25 ? 1 : 0,
        "narrow" => x => Math.Exp(-x * x / (2 * 0.03 * 0.03)),
        "two boxes" => x => Math.Abs(Math.Abs(x) - 1.5) < 0.25 ? 1 : 0,
        "wall" => x => x < -2.5 ? 1 : 0,
        _ => x => x < 0 ? 1 : 1e-9,
    }), name, false);

    [Theory]
    [MemberData(nameof(HardStarts))]
    public void Advance_HardStart_ConvergesAndKeepsThePromiseOfAStep(string start, double step)
    {
        var (problem, run) = Begin(Wells, 0.5, Start(start));
        var excess = double.PositiveInfinity;
        for (var k = 0; k < 6; k++)
        {
            var report = run.Advance(step);
            Assert.Null(report.Failure);
            Assert.Null(report.Warning);
            Assert.True(report.Residual < 1e-7);
            var now = run.FreeEnergyExcess();
            // Comparing the minimiser with standing still: W2² ≤ 2τ(Fₙ − Fₙ₊₁). The parcels of a start with gaps have no energy before the first step.
            if (k > 0)
                Assert.True(report.StepDistance * report.StepDistance <= 2 * step * (excess - now) + 1e-14, $"step {k}");
            Assert.True(now < excess);
            excess = now;
            var density = run.Snapshot();
            Assert.Equal(1, density.Mass, 1e-13);
            Assert.All(density.Values, value => Assert.True(value > 0 && double.IsFinite(value)));
            Assert.Equal(now, problem.FreeEnergy(density.Values) - problem.EquilibriumFreeEnergy, 0.01 * now + 1e-4);
        }
    }

    [Theory]
    [InlineData("box")]
    [InlineData("narrow")]
    public void Advance_HardStartOnCircle_Converges(string start)
    {
        var (_, run) = Begin(new Ripple(1), 0.5, Start(start), AxisEnds.Periodic, halfWidth: Math.PI);
        for (var k = 0; k < 6; k++)
        {
            var report = run.Advance(0.05);
            Assert.Null(report.Failure);
            Assert.Equal(1, run.Snapshot().Mass, 1e-13);
        }
    }

    /// <summary>
    /// Optimality outside the support of the start: there x goes back to the nearest end e of the box, so that T log ρ + V + (x − e)²/(2τ) is one constant.
    /// </summary>
    [Fact]
    public void Advance_BoxStart_HasGaussianTailsOverManyDecades()
    {
        const double step = 0.02;
        var (problem, run) = Begin(Wells, 0.5, Start("box"), cells: 512);
        var axis = problem.Grid.X;
        var end = axis.Edge(Array.FindLastIndex(run.Snapshot().Values, value => value > 0) + 1);
        run.Advance(step);
        var density = run.Snapshot();
        double Level(int cell) => 0.5 * Math.Log(density.Values[cell]) + problem.CellPotential[cell] + Math.Pow(axis.Center(cell) - end, 2) / (2 * step);
        var first = axis.CellOf(-0.2);
        var last = axis.CellOf(0.5);
        Assert.InRange(density.Values[last] / density.Values[first], 0, 1e-20);
        for (var cell = first; cell <= last; cell++)
            Assert.Equal(Level(first), Level(cell), 0.02 + 0.005 * 0.5 * Math.Abs(Math.Log(density.Values[cell])));
    }

    [Fact]
    public void Advance_NormalDensity_KeepsRelativeAccuracyInItsTails()
    {
        // The recursion of normal densities fixes every cell, seven deviations out; nearer to the wall its mirror image counts.
        const double temperature = 0.5;
        const double step = 0.1;
        var (problem, run) = Begin(new PolynomialPotential(0, 0, 0.5), temperature, new GaussianStart(0, 0.09), cells: 1024, halfWidth: 5);
        var deviation = 0.3;
        for (var k = 0; k < 5; k++)
        {
            run.Advance(step);
            deviation = (deviation + Math.Sqrt(deviation * deviation + 4 * temperature * step * (1 + step))) / (2 * (1 + step));
        }

        var density = run.Snapshot();
        for (var cell = 0; cell < 1024; cell++)
        {
            var x = problem.Grid.X.Center(cell);
            var exact = Math.Exp(-0.5 * x * x / (deviation * deviation)) / (deviation * Math.Sqrt(2 * Math.PI));
            if (exact > 1e-12)
                Assert.Equal(1, density.Values[cell] / exact, 2e-3);
        }
    }

    [Fact]
    public void Advance_AnyNumberOfParcels_ConvergesToOneDensity()
    {
        Density Run(int parcels)
        {
            var (_, run) = Begin(Wells, 0.5, new GaussianStart(-0.8, 0.16), scheme: new JkoScheme(parcels: parcels));
            for (var k = 0; k < 4; k++)
                run.Advance(0.05);
            return run.Snapshot();
        }

        var finest = Run(16000);
        var observed = ObservedOrder.Measure([1 / 250.0, 1 / 500.0, 1 / 1000.0, 1 / 2000.0],
            size => LineTransport.Distance(Run((int)Math.Round(1 / size)), finest));
        observed.AssertAtLeast(1.7);
        Assert.True(observed.Errors[^1] < 1e-5, observed.ToString());
    }

    [Fact]
    public void Advance_MillionParcels_Runs()
    {
        using var team = new WorkerTeam(2);
        var problem = new Problem(Wells, 0.5, new Domain(new Interval(-3.5, 3.5)), new GaussianStart(-0.8, 0.16));
        var grid = new Grid(new Axis(problem.Domain.X, 512));
        var onGrid = new GridProblem(problem, grid);
        var start = StartOnGrid.Create(problem.Start, grid);
        var run = (QuantileRun)new JkoScheme(parcels: 1_000_000).Begin(onGrid, start, team);
        Assert.InRange(run.Parcels, 1_000_000, 1_001_000);
        var coarse = new JkoScheme(parcels: 20_000).Begin(onGrid, start, team);
        for (var k = 0; k < 2; k++)
        {
            Assert.Null(run.Advance(0.02).Failure);
            coarse.Advance(0.02);
        }

        Assert.InRange(LineTransport.Distance(run.Snapshot(), coarse.Snapshot()), 0, 1e-7);
    }

    /// <summary>
    /// W2²(exact flow, JKO) ≤ τ(F(ρ₀) − F_τ(ρ₀)) ≤ τ²|∂F|²/2 at every step, for convex V; F_τ is the first step's minimum and |∂F|² the dissipation. L. Ambrosio,
    /// N. Gigli, G. Savaré, Gradient Flows, 2nd ed. 2008, Theorem 4.0.4 (from memory).
    /// </summary>
    [Fact]
    public void Advance_ConvexPotential_StaysWithinTheErrorBound()
    {
        const double step = 0.05;
        const double temperature = 0.5;
        var (problem, run) = Begin(new PolynomialPotential(0, 0, 0.5), temperature, new GaussianStart(2, 0.09), cells: 1000, halfWidth: 5);
        var start = run.Snapshot();
        var first = problem.FreeEnergy(start.Values);
        double bound = 0, worst = 0;
        for (var k = 1; k <= 20; k++)
        {
            var report = run.Advance(step);
            if (k == 1)
            {
                var envelope = report.StepDistance!.Value * report.StepDistance.Value / (2 * step) + problem.FreeEnergy(run.Snapshot().Values);
                bound = step * (first - envelope);
                var slope = 4 + Math.Pow(0.3 - temperature / 0.3, 2);
                Assert.InRange(bound, 0, 0.5 * step * step * slope);
            }

            var (mean, variance) = (2 * Math.Exp(-k * step), 0.09 * Math.Exp(-2 * k * step) + temperature * (1 - Math.Exp(-2 * k * step)));
            var exact = StartOnGrid.Create(new GaussianStart(mean, variance), problem.Grid);
            var distance = LineTransport.Distance(run.Snapshot(), exact);
            Assert.InRange(distance * distance, 0, bound);
            worst = Math.Max(worst, distance);
        }

        // Evaluated on normal densities outside this program: 0.01906 against 0.08099.
        Assert.Equal(0.01906, worst, 2e-4);
        Assert.Equal(0.08099, Math.Sqrt(bound), 2e-4);
    }

    [Theory]
    [InlineData("jko", 1)]
    [InlineData("jko-bdf2", 2)]
    [InlineData("jko-midpoint", 2)]
    public void Advance_DoubleWell_ConvergesToTheExactFlowInTime(string name, int order)
    {
        var exact = new ExactFlowScheme();
        var observed = ObservedOrder.Measure([0.1, 0.05, 0.025], step =>
        {
            var (problem, run) = Begin(Wells, 0.5, new GaussianStart(-0.8, 0.16), cells: 2048, scheme: SchemeCatalogue.Find(name)!);
            for (var k = 0; k < (int)Math.Round(0.5 / step); k++)
                run.Advance(step);
            using var yardstick = exact.Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
            yardstick.Advance(0.5);
            return LineTransport.Distance(run.Snapshot(), yardstick.Snapshot());
        });
        observed.AssertFinest(order, 0.2);
    }

    [Theory]
    [InlineData("jko")]
    [InlineData("jko-bdf2")]
    public void Advance_KinkedPotential_ConvergesToTheExactFlow(string name)
    {
        var observed = ObservedOrder.Measure([0.1, 0.05, 0.025, 0.0125], step =>
        {
            var (problem, run) = Begin(new Vee(), 0.3, new GaussianStart(0.5, 0.1), cells: 1024, scheme: SchemeCatalogue.Find(name)!);
            for (var k = 0; k < (int)Math.Round(0.5 / step); k++)
                Assert.Null(run.Advance(step).Failure);
            using var yardstick = new ExactFlowScheme().Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
            yardstick.Advance(0.5);
            return LineTransport.Distance(run.Snapshot(), yardstick.Snapshot());
        });
        Assert.True(observed.Fitted > 0.85, observed.ToString());
    }

    [Fact]
    public void Advance_FlatPotentialAgainstWall_SpreadsToTheUniformDensity()
    {
        // Heat flow in a box of length 7 from its left end: the mean follows cosine series; two mirrored starts give mirrored densities.
        var flat = new PolynomialPotential(0.0);
        var (_, left) = Begin(flat, 1, new FunctionStart(Of(x => x < -3 ? 1 : 0), "left", false), cells: 280);
        var (_, right) = Begin(flat, 1, new FunctionStart(Of(x => x > 3 ? 1 : 0), "right", false), cells: 280);
        for (var k = 0; k < 100; k++)
        {
            Assert.Null(left.Advance(0.01).Failure);
            right.Advance(0.01);
        }

        var (a, b) = (left.Snapshot().Values, right.Snapshot().Values);
        for (var i = 0; i < a.Length; i++)
            Assert.Equal(1, a[i] / b[^(i + 1)], 1e-7);

        // ρ = 1/7 + (2/7) Σ c_n cos(nπy/7) e^(−(nπ/7)² t), c_n = sin(nπ/14)/(nπ/14), y from the wall.
        for (var i = 0; i < a.Length; i += 7)
        {
            var y = (i + 0.5) / 40;
            var exact = 1.0 / 7;
            for (var n = 1; n < 60; n++)
                exact += 2.0 / 7 * Math.Sin(n * Math.PI / 14) / (n * Math.PI / 14) * Math.Cos(n * Math.PI * y / 7) * Math.Exp(-Math.Pow(n * Math.PI / 7, 2));
            Assert.Equal(exact, a[i], 3e-3);
        }

        for (var k = 0; k < 20; k++)
            left.Advance(20);
        Assert.All(left.Snapshot().Values, value => Assert.Equal(1.0 / 7, value, 1e-9));
    }

    [Fact]
    public void Advance_LongStepOverBarrier_SaysThatTheMinimiserNeedNotBeUnique()
    {
        var (problem, run) = Begin(Wells, 0.05, new GaussianStart(-0.8, 0.01));
        Assert.Null(run.Advance(0.9).Warning);
        var report = run.Advance(1.5);
        Assert.Null(report.Failure);
        Assert.Contains("unique", report.Warning, StringComparison.Ordinal);
        Assert.Contains("Use a step below 1", report.Warning, StringComparison.Ordinal);
        Assert.True(problem.FreeEnergy(run.Snapshot().Values) > problem.EquilibriumFreeEnergy);
    }

    [Fact]
    public void Advance_Circle_DoesNotCareWhereItIsCut()
    {
        const int cells = 240;
        const int turn = 77;
        var angle = turn * 2 * Math.PI / cells;
        Density Run(double phase)
        {
            var (_, run) = Begin(new Ripple(1, phase), 0.4, new FunctionStart(Of(x => Math.Exp(2 * Math.Cos(x - 1 - phase))), "lump"),
                AxisEnds.Periodic, cells, Math.PI);
            for (var k = 0; k < 5; k++)
                Assert.Null(run.Advance(0.1).Failure);
            return run.Snapshot();
        }

        var (here, there) = (Run(0), Run(angle));
        for (var i = 0; i < cells; i++)
            Assert.Equal(here.Values[i], there.Values[(i + turn) % cells], 2e-5);
    }

    [Fact]
    public void Advance_CircleAllWayRound_ConvergesToTheExactFlow()
    {
        // A tilted start whose mass crosses the cut.
        var observed = ObservedOrder.Measure([0.2, 0.1, 0.05], step =>
        {
            var (problem, run) = Begin(new Ripple(1), 0.4, new FunctionStart(Of(x => Math.Exp(2 * Math.Cos(x - 3))), "lump"), AxisEnds.Periodic, 512, Math.PI);
            for (var k = 0; k < (int)Math.Round(1 / step); k++)
                run.Advance(step);
            using var yardstick = new ExactFlowScheme().Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
            yardstick.Advance(1);
            return CircleTransport.Distance(run.Snapshot(), yardstick.Snapshot());
        });
        observed.AssertFinest(1, 0.2);
    }

    [Fact]
    public void Advance_Mobility_RescalesTheStep()
    {
        var (_, fast) = Begin(Wells, 0.5, new GaussianStart(-0.8, 0.16), mobility: 4);
        var (_, slow) = Begin(Wells, 0.5, new GaussianStart(-0.8, 0.16));
        fast.Advance(0.025);
        slow.Advance(0.1);
        Assert.Equal(slow.Snapshot().Values, fast.Snapshot().Values);
    }

    [Fact]
    public void Snapshot_BeforeTheFirstStep_IsTheStart()
    {
        var start = new GaussianStart(-0.8, 0.16);
        var (problem, run) = Begin(Wells, 0.5, start);
        Assert.Equal(StartOnGrid.Create(start, problem.Grid).Normalised().Values, run.Snapshot().Values);
    }

    [Fact]
    public void JkoScheme_BadParcels_SaysSo()
    {
        var fault = Assert.Throws<ArgumentOutOfRangeException>(() => new JkoScheme(parcels: 20));
        Assert.Contains("parcels was 20; it must be from 128 to 1000000.", fault.Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Advance_Bdf2WithUnequalSteps_StaysSecondOrder()
    {
        Density Run(int pairs)
        {
            var (_, run) = Begin(Wells, 0.5, new GaussianStart(-0.8, 0.16), scheme: new JkoBdf2Scheme());
            for (var k = 0; k < pairs; k++)
            {
                run.Advance(0.4 / pairs * 0.35);
                run.Advance(0.4 / pairs * 0.65);
            }

            return run.Snapshot();
        }

        var finest = Run(256);
        ObservedOrder.Measure([1 / 8.0, 1 / 16.0, 1 / 32.0], size => Distance(Run((int)Math.Round(1 / size)), finest)).AssertFinest(2, 0.2);
    }

    [Fact]
    public void Advance_MidpointStepThatFolds_StaysPositiveAndSaysSo()
    {
        // 1 + λτ/2 = 3.5: the half step squeezes every parcel to less than half.
        var (_, run) = Begin(new PolynomialPotential(0, 0, 25), 0.5, new GaussianStart(0.5, 0.25), scheme: new JkoMidpointScheme());
        var report = run.Advance(0.1);
        Assert.Null(report.Failure);
        Assert.Contains("folded", report.Warning, StringComparison.Ordinal);
        var density = run.Snapshot();
        Assert.Equal(1, density.Mass, 1e-12);
        Assert.All(density.Values, value => Assert.True(value >= 0 && double.IsFinite(value)));
    }

    [Theory]
    [InlineData("jko-bdf2")]
    [InlineData("jko-midpoint")]
    public void Advance_SecondOrderFromBox_StaysPositive(string name)
    {
        var (_, run) = Begin(Wells, 0.5, Start("box"), scheme: SchemeCatalogue.Find(name)!);
        for (var k = 0; k < 20; k++)
        {
            Assert.Null(run.Advance(0.02).Failure);
            var density = run.Snapshot();
            Assert.Equal(1, density.Mass, 1e-12);
            Assert.All(density.Values, value => Assert.True(value >= 0 && double.IsFinite(value)));
        }
    }

    private static double Distance(Density a, Density b)
    {
        var sum = 0.0;
        for (var i = 0; i < a.Values.Length; i++)
            sum += Math.Abs(a.Values[i] - b.Values[i]);
        return sum * a.Grid.CellVolume;
    }

    private sealed class Ripple(double height, double phase = 0) : Potential
    {
        public override int Dimension => 1;

        public override string Description => "ripple";

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = height * Math.Cos(x[i] - phase);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
                gradientX[i] = -height * Math.Sin(x[i] - phase);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, target.GradientY);
            for (var i = 0; i < x.Length; i++)
                target.HessianXX[i] = -height * Math.Cos(x[i] - phase);
        }
    }

    private sealed class Vee : Potential
    {
        public override int Dimension => 1;

        public override string Description => "abs(x)";

        public override bool IsSmooth => false;

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = Math.Abs(x[i]);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
                gradientX[i] = Math.Sign(x[i]);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, target.GradientY);
            target.HessianXX.Clear();
        }

        public override IReadOnlyList<Kink> FindKinks(Interval interval) => interval.Contains(0) ? [new Kink(0, -1, 1, 0)] : [];
    }
}

/// <summary>The conformance suite on the line, default number of parcels. Mutation tried: see <see cref="JkoLineTests"/>.</summary>
public class JkoLineConformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new OnLineOnly(new JkoScheme());

    protected override double StationaryTolerance => 1e-12;
}

/// <summary>The conformance suite of BDF2 steps. Mutation tried: weights 3/2 and 1/2 in place of 4/3 and 1/3 lower the order to 1.</summary>
public class JkoBdf2Conformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new JkoBdf2Scheme();

    protected override double StationaryTolerance => 1e-12;
}

/// <summary>The conformance suite of midpoint steps. Mutation tried: going on by 0.9 of the half step in place of the whole of it lowers the order to 1.</summary>
public class JkoMidpointConformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new JkoMidpointScheme();

    protected override double StationaryTolerance => 1e-12;
}
