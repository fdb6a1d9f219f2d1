using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Studies;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Studies;

/// <summary>
/// Mutations tried and seen to fail: links of the second axis halved; time to a set with the source off by a hundredth; committor with the two sets exchanged; the second
/// pass of the network of wells ignored; shares of the start taken without the cell's volume; the effective diffusion without its corrector.
/// </summary>
public class RelaxationTests
{
    private static GridProblem Plane(double temperature, int nx, int ny, AxisEnds endsX = AxisEnds.Reflecting, AxisEnds endsY = AxisEnds.Reflecting, double coupling = -0.5, double reach = 2)
    {
        var (x, y) = (new Interval(-reach, reach, endsX), new Interval(-reach, reach, endsY));
        return new GridProblem(
            new Problem(new PlanePotential(-1, coupling, 1, 1), temperature, new Domain(x, y), new GaussianStart(-0.9, 0.03, -0.3, 0.05), 1.4),
            new Grid(new Axis(x, nx), new Axis(y, ny)));
    }

    [Theory]
    [InlineData(AxisEnds.Reflecting, AxisEnds.Reflecting, 70, 64, 0.1)]
    [InlineData(AxisEnds.Periodic, AxisEnds.Reflecting, 64, 90, 0.1)]
    [InlineData(AxisEnds.Periodic, AxisEnds.Periodic, 61, 75, 0.3)]
    [InlineData(AxisEnds.Reflecting, AxisEnds.Reflecting, 128, 100, 0.02)]
    public void FindModes_SumOfPotentials_AreSumsOfRatesOnLines(AxisEnds endsX, AxisEnds endsY, int nx, int ny, double temperature)
    {
        // (x⁴ + y⁴)/4 − x²/2 + y²/2 splits into two lines.
        var plane = Plane(temperature, nx, ny, endsX, endsY, 0);
        double[] Line(double quadratic, Axis axis) => Relaxation.FindModes(
            new Generator(new GridProblem(new Problem(new PolynomialPotential(0, 0, quadratic / 2, 0, 0.25), temperature, new Domain(axis.Interval), new GaussianStart(0, 1), 1.4), new Grid(axis))),
            12, 1e-6, WorkerTeam.Alone).Rates;
        double[] alongX = [0, .. Line(-1, plane.Grid.X)], alongY = [0, .. Line(1, plane.Grid.Y!)];
        var sums = alongX.SelectMany(_ => alongY, (a, b) => a + b).Order().Skip(1).ToArray();
        var found = Relaxation.FindModes(new Generator(plane), 8, 1e-6, WorkerTeam.Alone);
        Assert.True(found.Converged);
        for (var k = 0; k < 8; k++)
            Assert.Equal(1, found.Rates[k] / sums[k], 1e-8);
    }

    [Fact]
    public void FindModes_ThreeThreads_GiveTheSameBytes()
    {
        using var team = new WorkerTeam(3);
        var generator = new Generator(Plane(0.1, 80, 72));
        var alone = Relaxation.FindModes(generator, 5, 1e-6, WorkerTeam.Alone);
        var shared = Relaxation.FindModes(generator, 5, 1e-6, team);
        Assert.Equal(alone.Rates, shared.Rates);
        for (var k = 0; k < 5; k++)
            Assert.Equal(alone.Modes[k], shared.Modes[k]);
    }

    [Fact]
    public void Analyse_TwoWellsInThePlane_FindsWellsRatesTimesAndDecay()
    {
        var problem = Plane(0.05, 128, 128);
        var result = Relaxation.Analyse(problem, new RelaxationOptions { Modes = 5 }, WorkerTeam.Alone);
        Assert.Empty(result.Remarks);
        Assert.Equal(6, result.Modes.Count);
        Assert.Equal(0, result.Modes[0].Rate);
        Assert.Equal(1, result.Modes[0].StartShare, 1e-12);
        Assert.Equal(2, result.Kramers.Wells.Count);
        Assert.Single(result.Kramers.Passes);
        Assert.Equal(0, result.Kramers.Passes[0].X, 1e-12);
        // V = −x²/2 − xy/2 + y²/2 + (x⁴ + y⁴)/4: slopes vanish at the wells.
        foreach (var well in result.Kramers.Wells)
        {
            Assert.Equal(0, -well.X - 0.5 * well.Y + well.X * well.X * well.X, 1e-12);
            Assert.Equal(0, -0.5 * well.X + well.Y + well.Y * well.Y * well.Y, 1e-12);
        }

        // One barrier of five temperatures: the formula is right to about a tenth; rate and time of passage belong together, gap·time = 2 for two equal wells.
        Assert.InRange(result.SpectralGap / result.Kramers.SlowRates[0], 0.8, 1.1);
        Assert.Equal(2, result.Passages.Count);
        Assert.Equal(1, result.Passages[0].Time / result.Passages[1].Time, 1e-6);
        Assert.InRange(result.SpectralGap * result.Passages[0].Time, 1.9, 2.1);
        // Halfway between the wells the odds are even.
        Assert.NotNull(result.Committor);
        var committor = result.Committor!;
        for (var cell = 0; cell < committor.Length; cell++)
        {
            // The error is small in energy, which counts for nothing where there is no mass.
            if (problem.Equilibrium.Values[cell] > 1e-12)
                Assert.Equal(1, committor[cell] + committor[committor.Length - 1 - cell], 1e-8);
        }

        // The start has shares in all modes of one kind; at late times the slowest one alone is left.
        Assert.Equal(8, result.Decay.Count);
        Assert.Equal(1, result.Decay[^1].Measured / result.Decay[^1].Predicted, 1e-6);
        Assert.Equal(result.Modes[1].Rate, result.Decay[^1].MeasuredRate!.Value, 1e-6 * result.Modes[1].Rate);
        Assert.All(result.Decay, row => Assert.True(row.Measured >= row.Predicted * (1 - 1e-6)));
        Assert.Null(result.Diffusion);
    }

    /// <summary>V/T up to 1000: equilibrium underflows in the corners, which must not reach the modes of the wells.</summary>
    [Fact]
    public void FindModes_EquilibriumUnderflows_StillFindsTheWells()
    {
        var generator = new Generator(Plane(0.01, 200, 200));
        Assert.Contains(generator.Problem.Equilibrium.Values, value => value < 1e-290);
        var found = Relaxation.FindModes(generator, 4, 1e-5, WorkerTeam.Alone);
        Assert.True(found.Converged);
        var kramers = KramersEstimate.Of(generator.Problem.Problem);
        Assert.InRange(found.Rates[0] / kramers.SlowRates[0], 0.95, 1);
        // The next ones are those of a parabola: at the pass M times its negative curvature, and in each of the two wells M times the smaller one.
        Assert.InRange(found.Rates[1] / (-1.4 * kramers.Passes[0].LowCurvature), 0.93, 1.02);
        Assert.InRange(found.Rates[2] / (1.4 * kramers.Wells[0].LowCurvature), 0.93, 1.02);
        Assert.Equal(1, found.Rates[3] / found.Rates[2], 1e-6);
    }

    [Fact]
    public void Analyse_Rates_ImproveByExtrapolation()
    {
        double[] At(int cells, bool extrapolated)
        {
            var interval = new Interval(-3, 3);
            var problem = new GridProblem(new Problem(new PolynomialPotential(0, 0, -0.5, 0, 0.25), 0.1, new Domain(interval), new GaussianStart(-1, 0.1)), new Grid(new Axis(interval, cells)));
            var result = Relaxation.Analyse(problem, new RelaxationOptions { Modes = 3, MeasureDecay = false }, WorkerTeam.Alone);
            return [.. result.Modes.Select(mode => extrapolated ? mode.ExtrapolatedRate : mode.Rate)];
        }

        double[] exact = [0, 0.0335452873080006109, 0.927372102607585942, 1.68026376738833445];
        for (var k = 1; k < 4; k++)
            Assert.True(Math.Abs(At(200, true)[k] / exact[k] - 1) < 0.02 * Math.Abs(At(200, false)[k] / exact[k] - 1));
    }

    [Fact]
    public void MeanToSet_Plane_AgreesWithDenseSolution()
    {
        var generator = new Generator(Plane(0.2, 40, 36));
        var target = new bool[generator.Grid.CellCount];
        for (var cell = 0; cell < target.Length; cell++)
            target[cell] = cell % 40 >= 30 && cell / 40 is > 10 and < 25;
        var time = PassageTimes.MeanToSet(generator, target);
        var applied = new double[time.Length];
        generator.ApplyBackward(time, applied);
        for (var cell = 0; cell < time.Length; cell++)
        {
            if (target[cell])
                Assert.Equal(0, time[cell]);
            else if (generator.Problem.Equilibrium.Values[cell] > 1e-8)
                Assert.Equal(-1, applied[cell], 1e-4);
        }

        // Nearly the time of a point by the other route: on the line, where both are at hand.
        var line = new Interval(-2.5, 2.5);
        var on = new Generator(new GridProblem(new Problem(new PolynomialPotential(0, 0, -0.5, 0, 0.25), 0.1, new Domain(line), new GaussianStart(-1, 0.1)), new Grid(new Axis(line, 1001))));
        var beyond = new bool[1001];
        for (var i = 0; i < 1001; i++)
            beyond[i] = i >= 700;
        var toSet = PassageTimes.MeanToSet(on, beyond);
        Assert.Equal(1, toSet[300] / PassageTimes.BetweenPoints(on, on.Grid.X.Center(300), on.Grid.X.Center(700)), 1e-12);
    }

    [Fact]
    public void Committor_OnALine_IsTheResistanceCrossed()
    {
        var line = new Interval(-2.5, 2.5);
        var generator = new Generator(new GridProblem(new Problem(new PolynomialPotential(0, 0.1, -0.5, 0, 0.25), 0.1, new Domain(line), new GaussianStart(-1, 0.1)), new Grid(new Axis(line, 500))));
        var (a, b) = (new bool[500], new bool[500]);
        a.AsSpan(0, 150).Fill(true);
        b.AsSpan(350).Fill(true);
        var committor = PassageTimes.Committor(generator, a, b);
        double Resistance(int from, int to)
        {
            var sum = 0.0;
            for (var i = from; i < to; i++)
                sum += 1 / (generator.Problem.Equilibrium.Values[i] * generator.RateRight[i]);
            return sum;
        }

        for (var i = 149; i <= 350; i++)
            Assert.Equal(Resistance(149, i) / Resistance(149, 350), committor[i], 1e-12);
        Assert.Equal(0, committor[0]);
        Assert.Equal(1, committor[499]);
    }

    [Fact]
    public void Sets_EmptyOrOverlapping_AreRefused()
    {
        var generator = new Generator(Plane(0.2, 12, 12));
        var (none, some) = (new bool[144], new bool[144]);
        some[5] = true;
        Assert.Throws<ArgumentException>(() => PassageTimes.MeanToSet(generator, none));
        Assert.Contains("shared a cell", Assert.Throws<ArgumentException>(() => PassageTimes.Committor(generator, some, some)).Message, StringComparison.Ordinal);
        Assert.Throws<ArgumentException>(() => Relaxation.FindModes(generator, 100, 1e-6, WorkerTeam.Alone));
    }

    [Fact]
    public void EffectiveDiffusion_SumOfPotentials_IsThatOfEachLine()
    {
        var circle = new Interval(0, 2 * Math.PI, AxisEnds.Periodic);
        GridProblem Make(Potential potential, Grid grid) => new(new Problem(potential, 0.5, new Domain(grid.X.Interval, grid.Y?.Interval), grid.Y is null ? new GaussianStart(3, 1) : new GaussianStart(3, 1, 3, 1), 2), grid);
        var (axisX, axisY) = (new Axis(circle, 64), new Axis(circle, 80));
        var plane = EffectiveDiffusion.Of(new Generator(Make(new Waves(1, 0.6, 0), new Grid(axisX, axisY))))!;
        var alongX = EffectiveDiffusion.Of(new Generator(Make(new LinePotentialOf(Math.Cos), new Grid(axisX))))!;
        var alongY = EffectiveDiffusion.Of(new Generator(Make(new LinePotentialOf(y => 0.6 * Math.Cos(y)), new Grid(axisY))))!;
        Assert.Equal(1, plane.XX!.Value / alongX.XX!.Value, 1e-8);
        Assert.Equal(1, plane.YY!.Value / alongY.XX!.Value, 1e-8);
        Assert.Equal(0, plane.XY!.Value, 1e-8);
        // Waves along the diagonal: easy along the crests, hard across.
        var tilted = EffectiveDiffusion.Of(new Generator(Make(new Waves(0, 0, 1.5), new Grid(axisX, new Axis(circle, 64)))))!;
        Assert.Equal(tilted.XX!.Value, tilted.YY!.Value, 1e-8);
        Assert.True(tilted.XY < -0.1, $"{tilted.XY}");
        Assert.InRange(tilted.XX.Value - tilted.XY!.Value, 0.98, 1.02);
        Assert.Null(EffectiveDiffusion.Of(new Generator(Plane(0.2, 12, 12))));
    }

    [Fact]
    public void Kramers_FourWells_JoinsNeighboursOnly()
    {
        var interval = new Interval(-6, 6);
        var problem = new Problem(new LinePotentialOf(x => Math.Cos(2 * x) + 0.02 * x * x + 0.001 * x * x * x * x, x => -2 * Math.Sin(2 * x) + 0.04 * x + 0.004 * x * x * x), 0.2, new Domain(interval), new GaussianStart(0, 1));
        var kramers = KramersEstimate.Of(problem);
        Assert.Equal(4, kramers.Wells.Count);
        Assert.Equal(3, kramers.Passes.Count);
        Assert.Equal(6, kramers.Rows.Count);
        Assert.Equal(3, kramers.SlowRates.Count);
        // The trace of the jump process, one of whose rates is 0.
        Assert.Equal(1, kramers.SlowRates.Sum() / kramers.Rows.Sum(row => row.Rate), 1e-12);
        var rates = Relaxation.FindModes(new Generator(new GridProblem(problem, new Grid(new Axis(interval, 900)))), 4, 1e-6, WorkerTeam.Alone).Rates;
        for (var k = 0; k < 3; k++)
            Assert.InRange(rates[k] / kramers.SlowRates[k], 0.8, 1.05);
        Assert.True(rates[3] > 20 * rates[2]);
    }

    [Fact]
    public void Kramers_KinkedWells_UseTheirSlopes()
    {
        // V = 3·| |x| − 1 |: two kinked wells and a kinked pass; the mean of the resistances is exact up to terms of the order e^(−3/T).
        var interval = new Interval(-5, 5);
        var potential = new LinePotentialOf(x => 3 * Math.Abs(Math.Abs(x) - 1), x => 3 * Math.Sign(Math.Abs(x) - 1) * (x < 0 ? -1 : 1),
            [new Kink(-1, -3, 3, 0), new Kink(0, 3, -3, 0), new Kink(1, -3, 3, 0)]);
        var problem = new Problem(potential, 0.4, new Domain(interval), new GaussianStart(-1, 0.1));
        var kramers = KramersEstimate.Of(problem);
        Assert.Equal(2, kramers.Wells.Count);
        Assert.All(kramers.Wells, well => Assert.True(well.IsKink));
        var rate = Relaxation.FindModes(new Generator(new GridProblem(problem, new Grid(new Axis(interval, 2000)))), 1, 1e-6, WorkerTeam.Alone).Rates[0];
        Assert.InRange(rate / kramers.SlowRates[0], 0.99, 1.05);
    }

    [Fact]
    public void CriticalPoints_OfThePlane_AreAllFoundOnce()
    {
        // cos x + cos y on a torus: one well, one hilltop, two passes.
        var circle = new Interval(0, 2 * Math.PI, AxisEnds.Periodic);
        var points = CriticalPoints.Find(new Waves(1, 1, 0), new Domain(circle, circle), 64);
        Assert.Equal(4, points.Count);
        Assert.Equal(CriticalKind.Minimum, points[0].Kind);
        Assert.Equal(Math.PI, points[0].X, 1e-10);
        Assert.Equal(2, points.Count(point => point.Kind == CriticalKind.Saddle));
        Assert.Equal(2, points[^1].Potential, 1e-12);
    }

    // a cos x + b cos y + c cos(x + y).
    private sealed class Waves(double a, double b, double c) : Potential
    {
        public override int Dimension => 2;

        public override string Description => "waves";

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = a * Math.Cos(x[i]) + b * Math.Cos(y[i]) + c * Math.Cos(x[i] + y[i]);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
            {
                gradientX[i] = -a * Math.Sin(x[i]) - c * Math.Sin(x[i] + y[i]);
                gradientY[i] = -b * Math.Sin(y[i]) - c * Math.Sin(x[i] + y[i]);
            }
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, target.GradientY);
            for (var i = 0; i < x.Length; i++)
            {
                target.HessianXX[i] = -a * Math.Cos(x[i]) - c * Math.Cos(x[i] + y[i]);
                target.HessianXY[i] = -c * Math.Cos(x[i] + y[i]);
                target.HessianYY[i] = -b * Math.Cos(y[i]) - c * Math.Cos(x[i] + y[i]);
            }
        }
    }
}
