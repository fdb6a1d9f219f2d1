using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Problems.ClosedForms;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Schemes.ExactFlow;

/// <summary>
/// Mutations tried and seen to fail: the mean over a segment by its end values alone (jump and kink); exponent of one end used for both rates (detailed
/// balance); the edge that closes a periodic axis left out (mass on a circle); the seam's second value not taken.
/// </summary>
public class GeneratorTests
{
    private static Generator Line(Potential potential, double temperature, Interval interval, int cells, double mobility = 1)
        => new(new GridProblem(new Problem(potential, temperature, new Domain(interval), new GaussianStart(0, 1), mobility), new Grid(new Axis(interval, cells))));

    private static Generator Plane(AxisEnds endsX, AxisEnds endsY, int nx = 14, int ny = 9)
    {
        var domain = new Domain(new Interval(-2, 1.5, endsX), new Interval(-1, 2, endsY));
        return new Generator(new GridProblem(new Problem(new PlanePotential(-0.5, 0.7, 1, 0.3), 0.4, domain, new GaussianStart(0, 1, 0, 1), 1.7),
            new Grid(new Axis(domain.X, nx), new Axis(domain.Y!, ny))));
    }

    public static TheoryData<AxisEnds, AxisEnds> AllEnds => new()
    {
        { AxisEnds.Reflecting, AxisEnds.Reflecting }, { AxisEnds.Periodic, AxisEnds.Reflecting },
        { AxisEnds.Reflecting, AxisEnds.Periodic }, { AxisEnds.Periodic, AxisEnds.Periodic },
    };

    [Theory]
    [MemberData(nameof(AllEnds))]
    public void Rates_EveryEdge_BalanceInDetail(AxisEnds endsX, AxisEnds endsY)
    {
        var generator = Plane(endsX, endsY);
        var pi = generator.Problem.Equilibrium.Values;
        for (var cell = 0; cell < pi.Length; cell++)
        {
            var right = generator.RightOf(cell);
            var above = generator.Above(cell);
            Assert.Equal(pi[cell] * generator.RateRight[cell], pi[right] * generator.RateLeft[right], 1e-13 * pi[cell] * generator.RateRight[cell] + 1e-300);
            Assert.Equal(pi[cell] * generator.RateUp[cell], pi[above] * generator.RateDown[above], 1e-13 * pi[cell] * generator.RateUp[cell] + 1e-300);
        }

        var atWall = generator.RateRight[generator.Grid.Nx - 1];
        Assert.Equal(endsX == AxisEnds.Periodic, atWall > 0);
        Assert.Equal(endsY == AxisEnds.Periodic, generator.RateDown[0] > 0);
    }

    [Theory]
    [MemberData(nameof(AllEnds))]
    public void Apply_AnyDensity_KeepsMassAndMatchesItsAdjoint(AxisEnds endsX, AxisEnds endsY)
    {
        var generator = Plane(endsX, endsY);
        var count = generator.Grid.CellCount;
        var random = new Random(3);
        var (rho, u) = (new double[count], new double[count]);
        for (var i = 0; i < count; i++)
            (rho[i], u[i]) = (random.NextDouble(), random.NextDouble());
        var (forward, back) = (new double[count], new double[count]);
        generator.Apply(rho, forward);
        generator.ApplyBackward(u, back);
        var size = SpanKernels.MaxAbs(forward);
        Assert.Equal(0, SpanKernels.Sum(forward), 1e-13 * size * count);
        Assert.Equal(SpanKernels.Dot(forward, u), SpanKernels.Dot(rho, back), 1e-12 * size * count);
        Array.Fill(u, 1.0);
        generator.ApplyBackward(u, back);
        Assert.All(back, value => Assert.Equal(0.0, value));
        generator.Apply(generator.Problem.Equilibrium.Values, forward);
        Assert.All(forward, value => Assert.Equal(0, value, 1e-12 * size));
    }

    [Fact]
    public void Rates_LinearPotential_AreScharfetterGummel()
    {
        var generator = Line(new PolynomialPotential(0, 3), 0.4, new Interval(0, 2), 16, 1.5);
        var h = generator.Grid.X.Width;
        var z = 3 * h / 0.4;
        Assert.Equal(1.5 * 0.4 / (h * h) * (z / (Math.Exp(z) - 1)), generator.RateRight[5], 1e-12);
        Assert.Equal(1.5 * 0.4 / (h * h) * (-z / (Math.Exp(-z) - 1)), generator.RateLeft[5], 1e-12);
    }

    [Fact]
    public void Rates_CurvedPotential_ComeCloserThanLinearFitting()
    {
        // ∫e^(V/T) over a segment of a quartic by a fine midpoint sum.
        var quartic = new PolynomialPotential(0, 0, -0.5, 0, 0.25);
        var generator = Line(quartic, 0.05, new Interval(-2, 2), 40);
        var (h, cell) = (generator.Grid.X.Width, 31);
        var (a, b) = (generator.Problem.CellPotential[cell], generator.Problem.CellPotential[cell + 1]);
        var mean = 0.0;
        for (var k = 0; k < 4000; k++)
            mean += Math.Exp((quartic.ValueAt(generator.Grid.X.Center(cell) + (k + 0.5) / 4000 * h) - 0.5 * (a + b)) / 0.05) / 4000;
        var exact = 0.05 / (h * h) / mean;
        var ours = generator.CouplingRight(cell);
        var z = (b - a) / 0.05;
        var linear = 0.05 / (h * h) * (z / 2) / Math.Sinh(z / 2);
        Assert.True(Math.Abs(ours / exact - 1) < 0.1 * Math.Abs(linear / exact - 1), $"{ours:r} {linear:r} {exact:r}");
        Assert.True(Math.Abs(ours / exact - 1) < 0.01);
    }

    /// <summary>A jump Δ at the face between two cells: the mean of e^(V/T) over the segment is ½(1 + e^(Δ/T)), so that the coupling is the harmonic mean.</summary>
    [Fact]
    public void Rates_JumpAtFace_AreHarmonicMean()
    {
        var generator = Line(new BarrierPotential(2, 1, 2), 1, new Interval(-2, 2), 16);
        var h = generator.Grid.X.Width;
        // Cell 3 ends at −1, where the barrier begins.
        Assert.Equal(1 / (h * h) * 2 / (1 + Math.Exp(2)), generator.RateRight[3], 1e-12);
        Assert.Equal(1 / (h * h) * 2 / (1 + Math.Exp(-2)), generator.RateLeft[4], 1e-12);
        Assert.Equal(1 / (h * h), generator.RateRight[6], 1e-12);
    }

    [Theory]
    [InlineData(15)]
    [InlineData(16)]
    public void Rates_KinkOfAbsoluteValue_AreExact(int cells)
    {
        const double slope = 3, temperature = 0.7;
        var interval = new Interval(-1, 1.2);
        var generator = Line(new DryFriction(slope, temperature, 0).Potential, temperature, interval, cells);
        var h = generator.Grid.X.Width;
        for (var i = 0; i < cells - 1; i++)
        {
            var (from, to) = (generator.Grid.X.Center(i), generator.Grid.X.Center(i + 1));
            // ∫e^(a|x|/T) in closed form on either side of 0.
            double Primitive(double x) => Math.Sign(x) * temperature / slope * (Math.Exp(slope * Math.Abs(x) / temperature) - 1);
            var integral = Primitive(to) - Primitive(from);
            Assert.Equal(1, temperature / h * Math.Exp(slope * Math.Abs(from) / temperature) / integral / generator.RateRight[i], 1e-12);
        }
    }

    [Fact]
    public void Rates_PlaneWithUnknownKinks_AreCloseToExact()
    {
        var domain = new Domain(new Interval(-1, 1), new Interval(-1, 1));
        var generator = new Generator(new GridProblem(new Problem(new Pyramid(), 0.5, domain, new GaussianStart(0, 1, 0, 1)),
            new Grid(new Axis(domain.X, 11), new Axis(domain.Y!, 11))));
        var h = generator.Grid.X.Width;
        for (var i = 0; i < 10; i++)
        {
            var (from, to) = (generator.Grid.X.Center(i), generator.Grid.X.Center(i + 1));
            double Primitive(double x) => Math.Sign(x) * 0.5 / 4 * (Math.Exp(4 * Math.Abs(x) / 0.5) - 1);
            Assert.Equal(1, 0.5 / h * Math.Exp(4 * Math.Abs(from) / 0.5) / (Primitive(to) - Primitive(from)) / generator.RateRight[i], 1e-3);
            // Along y the same landscape by symmetry.
            Assert.Equal(generator.RateRight[i], generator.RateUp[i * 11], 1e-9 * generator.RateRight[i]);
        }
    }

    [Fact]
    public void Rates_AcrossTheSeamOfACircle_SeeBothSides()
    {
        // x on [0, 1) is a sawtooth on the circle: it jumps at the seam.
        var generator = Line(new PolynomialPotential(0, 1), 0.5, new Interval(0, 1, AxisEnds.Periodic), 8);
        var h = generator.Grid.X.Width;
        var z = h / 2 / 0.5;
        // From the last centre up to 1, then from 0 to the first centre: ∫ = T(e^(1/T) − e^((1−h/2)/T)) + T(e^((h/2)/T) − 1).
        var integral = 0.5 * (Math.Exp(2) - Math.Exp(2 - z)) + 0.5 * (Math.Exp(z) - 1);
        Assert.Equal(1, 0.5 / h * Math.Exp(2 - z) / integral / generator.RateRight[7], 1e-12);
    }

    [Fact]
    public void Constructor_AnyTeam_GivesTheSameRates()
    {
        using var team = new WorkerTeam(3);
        var domain = new Domain(new Interval(-2, 2), new Interval(-2, 2, AxisEnds.Periodic));
        var problem = new GridProblem(new Problem(new PlanePotential(1, 0.2, -1, 0.5), 0.3, domain, new GaussianStart(0, 1, 0, 1)),
            new Grid(new Axis(domain.X, 37), new Axis(domain.Y!, 23)));
        var (alone, shared) = (new Generator(problem), new Generator(problem, team));
        Assert.Equal(alone.RateRight.ToArray(), shared.RateRight.ToArray());
        Assert.Equal(alone.RateDown.ToArray(), shared.RateDown.ToArray());
        Assert.Equal(alone.SpectralBound, shared.SpectralBound);
    }

    [Fact]
    public void Constructor_PotentialTooSteep_NamesThePlace()
    {
        var exception = Assert.Throws<InputException>(() => Line(new PolynomialPotential(0, 0, 1e135), 1, new Interval(-1, 1), 8));
        Assert.Contains("steep near x = -0.875", exception.Message, StringComparison.Ordinal);
    }

    private sealed class Pyramid : Potential
    {
        public override int Dimension => 2;

        public override string Description => "4(|x| + |y|)";

        public override bool IsSmooth => false;

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = 4 * (Math.Abs(x[i]) + Math.Abs(y[i]));
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
                (gradientX[i], gradientY[i]) = (4 * Math.Sign(x[i]), 4 * Math.Sign(y[i]));
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target) => throw new NotSupportedException();
    }
}
