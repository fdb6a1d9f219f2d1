using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Transport;

/// <summary>Mutation tried: half a turn of images left out on a circle (before = 0) breaks the periodic rows of the brute-force theory.</summary>
public sealed class CTransformTests
{
    private static Grid MakeGrid(int nx, int ny, AxisEnds endsX, AxisEnds endsY)
        => new(new Axis(new Interval(-1, 2, endsX), nx), new Axis(new Interval(0, 1.7, endsY), ny));

    private static double Gap(Axis axis, int i, int k)
    {
        var gap = Math.Abs(axis.Center(i) - axis.Center(k));
        return axis.IsPeriodic ? Math.Min(gap, axis.Interval.Length - gap) : gap;
    }

    [Theory]
    [InlineData(AxisEnds.Reflecting, AxisEnds.Reflecting, 1.0)]
    [InlineData(AxisEnds.Periodic, AxisEnds.Reflecting, 0.2)]
    [InlineData(AxisEnds.Reflecting, AxisEnds.Periodic, 5.0)]
    [InlineData(AxisEnds.Periodic, AxisEnds.Periodic, 100.0)]
    public void Apply_RoughPotential_EqualsMinimumOverAllPairs(AxisEnds endsX, AxisEnds endsY, double time)
    {
        var grid = MakeGrid(19, 22, endsX, endsY);
        var random = new Random(3);
        var potential = new double[grid.CellCount];
        for (var i = 0; i < potential.Length; i++)
            potential[i] = i % 7 == 0 ? double.PositiveInfinity : random.NextDouble();
        var values = new double[grid.CellCount];
        var minimisers = new int[grid.CellCount];
        new CTransform(grid, time, WorkerTeam.Alone).Apply(potential, values, minimisers);

        double Cost(int a, int b) => (Math.Pow(Gap(grid.X, a % 19, b % 19), 2) + Math.Pow(Gap(grid.Y!, a / 19, b / 19), 2)) / (2 * time) + potential[b];
        for (var a = 0; a < values.Length; a++)
        {
            var least = Enumerable.Range(0, values.Length).Min(b => Cost(a, b));
            Assert.Equal(least, values[a], 1e-12);
            Assert.Equal(least, Cost(a, minimisers[a]), 1e-12);
        }
    }

    [Fact]
    public void Apply_OneDimension_EqualsMinimumOverAllPairs()
    {
        var axis = new Axis(new Interval(0, 1, AxisEnds.Periodic), 31);
        var potential = axis.Centers().Select(x => Math.Sin(40 * x * x)).ToArray();
        var values = new double[31];
        new CTransform(new Grid(axis), 0.03, WorkerTeam.Alone).Apply(potential, values);
        for (var i = 0; i < 31; i++)
            Assert.Equal(Enumerable.Range(0, 31).Min(k => Math.Pow(Gap(axis, i, k), 2) / 0.06 + potential[k]), values[i], 1e-13);
    }

    /// <summary>φ = ½ yᵀAy + b·y has φᶜ in closed form (its minimiser solves (I/t + A) y = x/t − b); the cubic reads it without error.</summary>
    [Fact]
    public void ApplyBetweenCenters_Quadratic_IsExactToRounding()
    {
        var grid = new Grid(new Axis(new Interval(-3, 3), 60), new Axis(new Interval(-3, 3), 50));
        const double t = 0.7, a = 0.8, b = -0.3, c = 0.5, e = 0.1, f = -0.2;
        double Phi(double x, double y) => 0.5 * (a * x * x + 2 * b * x * y + c * y * y) + e * x + f * y;
        var potential = Sample(grid, Phi);
        var (values, dx, dy) = (new double[grid.CellCount], new double[grid.CellCount], new double[grid.CellCount]);
        new CTransform(grid, t, WorkerTeam.Alone).ApplyBetweenCenters(potential, values, dx, dy, new int[grid.CellCount]);
        for (var i = 0; i < values.Length; i++)
        {
            var (x, y) = (grid.X.Center(i % 60), grid.Y!.Center(i / 60));
            var (p, q, r) = (1 / t + a, b, 1 / t + c);
            var (s1, s2) = (x / t - e, y / t - f);
            var (u, v) = ((r * s1 - q * s2) / (p * r - q * q), (p * s2 - q * s1) / (p * r - q * q));
            if (Math.Abs(u) > 2.7 || Math.Abs(v) > 2.7)
                continue;
            Assert.Equal(((x - u) * (x - u) + (y - v) * (y - v)) / (2 * t) + Phi(u, v), values[i], 1e-12);
            Assert.Equal(u - x, dx[i], 1e-9);
            Assert.Equal(v - y, dy[i], 1e-9);
        }
    }

    /// <summary>Fourth order in h, on a torus, from the smooth potential cos·cos whose minimiser is found by Newton's method here.</summary>
    [Fact]
    public void ApplyBetweenCenters_SmoothPotential_ConvergesAtFourthOrder()
    {
        const double t = 0.5, height = 0.4;
        double Error(double width)
        {
            var n = (int)Math.Round(2 * Math.PI / width);
            var grid = new Grid(new Axis(new Interval(0, 2 * Math.PI, AxisEnds.Periodic), n), new Axis(new Interval(0, 2 * Math.PI, AxisEnds.Periodic), n));
            var potential = Sample(grid, (x, y) => height * (Math.Cos(x) + Math.Cos(y)));
            var (values, dx, dy) = (new double[n * n], new double[n * n], new double[n * n]);
            new CTransform(grid, t, WorkerTeam.Alone).ApplyBetweenCenters(potential, values, dx, dy, new int[n * n]);
            var sum = 0.0;
            for (var i = 0; i < values.Length; i++)
                sum += Math.Abs(values[i] - OneAxis(grid.X.Center(i % n)) - OneAxis(grid.X.Center(i / n)));
            return sum / values.Length;
        }

        static double OneAxis(double x)
        {
            var y = x;
            for (var k = 0; k < 60; k++)
                y -= ((y - x) / t - height * Math.Sin(y)) / (1 / t - height * Math.Cos(y));
            return (x - y) * (x - y) / (2 * t) + height * Math.Cos(y);
        }

        ObservedOrder.Measure([2 * Math.PI / 24, 2 * Math.PI / 48, 2 * Math.PI / 96], Error).AssertFinest(4, 0.3);
    }

    /// <summary>A potential of 1e-9 keeps its relative accuracy: φᶜ − φ = −t|∇φ|²/2 to leading order.</summary>
    [Fact]
    public void ApplyBetweenCenters_TinyPotential_KeepsRelativeAccuracy()
    {
        var grid = MakeGrid(64, 64, AxisEnds.Reflecting, AxisEnds.Periodic);
        const double size = 1e-9;
        var potential = Sample(grid, (x, y) => size * (x + 0.3 * Math.Sin(2 * Math.PI * y / 1.7)));
        var (values, dx, dy) = (new double[grid.CellCount], new double[grid.CellCount], new double[grid.CellCount]);
        new CTransform(grid, 1, WorkerTeam.Alone).ApplyBetweenCenters(potential, values, dx, dy, new int[grid.CellCount]);
        for (var row = 0; row < 64; row++)
        {
            var cell = row * 64 + 30;
            var slope = size * 0.3 * 2 * Math.PI / 1.7 * Math.Cos(2 * Math.PI * grid.Y!.Center(row) / 1.7);
            Assert.Equal(-size, dx[cell], 1e-9 * size);
            Assert.Equal(-slope, dy[cell], 2e-3 * size);
            Assert.Equal(-0.5 * (size * size + slope * slope), values[cell] - potential[cell], 3e-3 * size * size);
        }
    }

    [Fact]
    public void ApplyBetweenCenters_AnyTeam_GivesTheSameBytesAndAllocatesNothing()
    {
        var grid = MakeGrid(65, 47, AxisEnds.Periodic, AxisEnds.Reflecting);
        var potential = Sample(grid, (x, y) => Math.Sin(3 * x) * Math.Cos(4 * y));
        var results = new List<double[]>();
        using var three = new WorkerTeam(3);
        foreach (var team in new[] { WorkerTeam.Alone, three })
        {
            var transform = new CTransform(grid, 0.2, team);
            var (values, dx, dy, found) = (new double[grid.CellCount], new double[grid.CellCount], new double[grid.CellCount], new int[grid.CellCount]);
            transform.ApplyBetweenCenters(potential, values, dx, dy, found);
            var before = GC.GetAllocatedBytesForCurrentThread();
            transform.ApplyBetweenCenters(potential, values, dx, dy, found);
            Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
            results.Add([.. values, .. dx, .. dy]);
        }

        Assert.Equal(results[0], results[1]);
    }

    [Fact]
    public void Apply_WrongLength_IsRefused()
    {
        var transform = new CTransform(MakeGrid(8, 8, AxisEnds.Reflecting, AxisEnds.Reflecting), 1, WorkerTeam.Alone);
        Assert.Throws<ArgumentException>(() => transform.Apply(new double[3], new double[64]));
        Assert.Throws<ArgumentOutOfRangeException>(() => transform.SetTime(0));
        var one = new double[64];
        Assert.Throws<ArgumentException>(() => transform.Apply(one, one));
    }

    private static double[] Sample(Grid grid, Func<double, double, double> function)
    {
        var values = new double[grid.CellCount];
        for (var i = 0; i < values.Length; i++)
            values[i] = function(grid.X.Center(i % grid.Nx), grid.Y!.Center(i / grid.Nx));
        return values;
    }
}
