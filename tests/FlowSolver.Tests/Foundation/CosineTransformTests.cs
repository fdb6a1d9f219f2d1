using FlowSolver.Foundation;

namespace FlowSolver.Tests.Foundation;

/// <summary>Mutation tried: the sign of the sine term of the cosine transform turned round; every cosine row of the theory fails.</summary>
public sealed class CosineTransformTests
{
    private static double[] Noise(int count, int seed)
    {
        var random = new Random(seed);
        return [.. Enumerable.Range(0, count).Select(_ => random.NextDouble() - 0.5)];
    }

    private static double Basis(int k, int i, int n, bool periodic)
        => periodic ? Math.Cos(2 * Math.PI * k * i / n) + Math.Sin(2 * Math.PI * k * i / n) : Math.Cos(Math.PI * k * (i + 0.5) / n);

    [Theory]
    [InlineData(8, 16, false, false)]
    [InlineData(32, 18, false, true)]
    [InlineData(30, 21, true, false)]
    [InlineData(17, 35, true, true)]
    [InlineData(49, 1, false, false)]
    [InlineData(22, 13, false, false)]
    public void Forward_AnyLength_EqualsTheSum(int nx, int ny, bool periodicX, bool periodicY)
    {
        var values = Noise(nx * ny, nx);
        var coefficients = (double[])values.Clone();
        var transform = new CosineTransform(nx, ny, periodicX, periodicY, WorkerTeam.Alone);
        transform.Forward(coefficients);
        for (var l = 0; l < ny; l += 3)
        {
            for (var k = 0; k < nx; k += 2)
            {
                var sum = 0.0;
                for (var j = 0; j < ny; j++)
                {
                    for (var i = 0; i < nx; i++)
                        sum += values[j * nx + i] * Basis(k, i, nx, periodicX) * (ny == 1 ? 1 : Basis(l, j, ny, periodicY));
                }

                Assert.Equal(sum, coefficients[l * nx + k], 1e-11);
            }
        }

        transform.Inverse(coefficients);
        for (var i = 0; i < values.Length; i++)
            Assert.Equal(values[i], coefficients[i], 1e-13);
    }

    /// <summary>Poisson's equation: the five-point operator applied to the solution gives the right side back, its mean dropped where singular.</summary>
    [Theory]
    [InlineData(48, 40, false, false, 0.0)]
    [InlineData(48, 40, true, false, 0.3)]
    [InlineData(33, 64, false, true, 0.0)]
    public void Solve_RandomRightSide_SatisfiesTheDifferenceEquation(int nx, int ny, bool periodicX, bool periodicY, double shift)
    {
        const double wx = 3.1, wy = 0.7;
        var f = Noise(nx * ny, 5);
        var u = (double[])f.Clone();
        using var team = new WorkerTeam(2);
        new CosineTransform(nx, ny, periodicX, periodicY, team).Solve(u, wx, wy, shift);
        var mean = shift > 0 ? 0 : f.Average();

        int Neighbour(int i, int n, bool periodic) => periodic ? (i + n) % n : Math.Clamp(i, 0, n - 1);
        for (var j = 0; j < ny; j++)
        {
            for (var i = 0; i < nx; i++)
            {
                var here = u[j * nx + i];
                var left = u[j * nx + Neighbour(i - 1, nx, periodicX)];
                var right = u[j * nx + Neighbour(i + 1, nx, periodicX)];
                var below = u[Neighbour(j - 1, ny, periodicY) * nx + i];
                var above = u[Neighbour(j + 1, ny, periodicY) * nx + i];
                Assert.Equal(f[j * nx + i] - mean, shift * here + wx * (2 * here - left - right) + wy * (2 * here - below - above), 1e-11);
            }
        }
    }

    [Fact]
    public void Solve_AnyTeam_GivesTheSameBytesAndAllocatesNothing()
    {
        var f = Noise(100 * 70, 1);
        var alone = (double[])f.Clone();
        var shared = (double[])f.Clone();
        using var team = new WorkerTeam(3);
        var transform = new CosineTransform(100, 70, false, true, WorkerTeam.Alone);
        transform.Solve(alone, 1, 2);
        new CosineTransform(100, 70, false, true, team).Solve(shared, 1, 2);
        Assert.Equal(alone, shared);
        var before = GC.GetAllocatedBytesForCurrentThread();
        transform.Solve(alone, 1, 2);
        transform.Forward(alone);
        transform.Inverse(alone);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }

    [Fact]
    public void Forward_WrongLength_IsRefused()
        => Assert.Throws<ArgumentException>(() => new CosineTransform(8, 8, false, false, WorkerTeam.Alone).Forward(new double[60]));
}
