using FlowSolver.Diagnostics;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Published;

/// <summary>
/// Mean squared distances of N independent points to their law. Uniform points: closed forms that follow from the variances of order statistics
/// (S. Bobkov, M. Ledoux, One-dimensional empirical measures, order statistics, and Kantorovich transport distances, Mem. AMS 261 no. 1259 (2019)).
/// Normal points: E W2² = 2 − 2 Σ E X₍ᵢ₎ (φ(Φ⁻¹((i−1)/N)) − φ(Φ⁻¹(i/N))), evaluated outside this program and confirmed there by simulation.
/// Tolerances are four standard errors of the simulated mean.
/// </summary>
public class SampleNoiseValues
{
    [Theory]
    [InlineData(1)]
    [InlineData(10)]
    [InlineData(999)]
    public void MeanSquare_UniformPoints_IsOneSixthOverN(int count)
    {
        var uniform = new Density(new Grid(new Axis(new Interval(0, 1), 16)), [.. Enumerable.Repeat(1.0, 16)]);
        AssertMeanSquare(1 / (6.0 * count), NoiseFloor.Simulate(uniform, count, 4000, 11, WorkerTeam.Alone)!);
    }

    [Theory]
    [InlineData(10, 0.2593677)]
    [InlineData(100, 0.0302010)]
    [InlineData(1000, 0.00333505)]
    [InlineData(10000, 0.000357954)]
    public void MeanSquare_NormalPoints_MatchesTable(int count, double expected)
    {
        // Cells of width 0.004 change the law by W2² of order 1e-6, against standard errors of 1e-4 (N = 10) to 1e-5 (N = 10000) of unit variance.
        var grid = new Grid(new Axis(new Interval(-9, 9), 4500));
        var normal = new Density(grid, [.. grid.X.Centers().Select(x => Math.Exp(-0.5 * x * x))]).Normalised();
        AssertMeanSquare(expected, NoiseFloor.Simulate(normal, count, count <= 1000 ? 3000 : 500, 5, WorkerTeam.Alone)!);
    }

    [Fact]
    public void MeanSquare_TwoUniformSamples_IsOneThirdOverNPlusOne()
    {
        // Two independent sets of n uniform points: E W2² = 1/(3(n + 1)).
        const int count = 20;
        const int draws = 4000;
        var squares = new double[draws];
        var first = new double[count];
        var second = new double[count];
        for (var draw = 0; draw < draws; draw++)
        {
            new UniformDraws(7, 1, (uint)draw).Fill(0, first);
            new UniformDraws(7, 2, (uint)draw).Fill(0, second);
            Array.Sort(first);
            Array.Sort(second);
            squares[draw] = Math.Pow(LineTransport.Distance(first, second), 2);
        }

        AssertMean(1 / (3.0 * (count + 1)), squares);
    }

    [Fact]
    public void MeanSquare_UniformPointsOnCircle_IsHalfThatOnTheLine()
    {
        // With the uniform law the best cut takes the mean of (sample quantile − u) away: E W2² = 1/(6N) − Var(mean of N points) = 1/(12N).
        const int count = 50;
        var uniform = new Density(new Grid(new Axis(new Interval(0, 1, AxisEnds.Periodic), 16)), [.. Enumerable.Repeat(1.0, 16)]);
        AssertMeanSquare(1 / (12.0 * count), NoiseFloor.Simulate(uniform, count, 4000, 13, WorkerTeam.Alone)!);
    }

    private static void AssertMeanSquare(double expected, NoiseFloor floor) => AssertMean(expected, [.. floor.Distances.ToArray().Select(w => w * w)]);

    private static void AssertMean(double expected, double[] values)
    {
        var mean = values.Average();
        var error = Math.Sqrt(values.Sum(value => (value - mean) * (value - mean)) / values.Length / (values.Length - 1.0));
        Assert.True(Math.Abs(mean - expected) <= 4 * error, $"{mean:r} against {expected:r}, standard error {error:g3}");
        Assert.True(error < 0.03 * expected, $"The standard error {error:g3} is too large to tell.");
    }
}
