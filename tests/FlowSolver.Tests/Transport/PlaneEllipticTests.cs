using System.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Transport;
using Xunit.Abstractions;

namespace FlowSolver.Tests.Transport;

/// <summary>Mutation tried: the sign of one corner coupling turned round; the solution no longer satisfies the nine-point operator and the theory fails.</summary>
public sealed class PlaneEllipticTests(ITestOutputHelper output)
{
    private static PlaneElliptic Make(int nx, int ny, bool px, bool py, bool corners, double contrast, WorkerTeam team, out double[] kx, out double[] ky, out double[] kc)
    {
        var solver = new PlaneElliptic(nx, ny, px, py, 1.0 / nx, 1.3 / ny, team) { HasCorners = corners };
        (kx, ky, kc) = (new double[nx * ny], new double[nx * ny], new double[nx * ny]);
        double K(double x, double y) => Math.Exp(-contrast * ((x - 0.4) * (x - 0.4) + (y - 0.6) * (y - 0.6))) + 1e-12;
        for (var j = 0; j < ny; j++)
        {
            for (var i = 0; i < nx; i++)
            {
                kx[j * nx + i] = i == nx - 1 && !px ? 0 : K((i + 1.0) / nx, (j + 0.5) / ny) * nx * nx;
                ky[j * nx + i] = j == ny - 1 && !py ? 0 : K((i + 0.5) / nx, (j + 1.0) / ny) * ny * ny / 1.69;
                kc[j * nx + i] = (i == nx - 1 && !px) || (j == ny - 1 && !py) ? 0 : 0.5 * 0.4 * K((i + 1.0) / nx, (j + 1.0) / ny) * nx * ny / 1.3;
            }

            kx.AsSpan(j * nx, nx).CopyTo(solver.RowX(j));
            ky.AsSpan(j * nx, nx).CopyTo(solver.RowY(j));
            kc.AsSpan(j * nx, nx).CopyTo(solver.RowCorner(j));
        }

        solver.Prepare();
        return solver;
    }

    [Theory]
    [InlineData(40, 33, false, false, false)]
    [InlineData(40, 33, false, true, true)]
    [InlineData(21, 48, true, false, true)]
    [InlineData(64, 64, true, true, true)]
    [InlineData(100, 12, false, false, true)]
    public void Solve_VariableCoefficients_SatisfiesTheOperator(int nx, int ny, bool px, bool py, bool corners)
    {
        var solver = Make(nx, ny, px, py, corners, 3, WorkerTeam.Alone, out var kx, out var ky, out var kc);
        var random = new Random(2);
        var f = new double[nx * ny];
        foreach (ref var value in f.AsSpan())
            value = random.NextDouble() - 0.5;
        var mean = f.Average();
        var u = new double[nx * ny];
        var iterations = solver.Solve(f, u, 1e-11, 100);
        output.WriteLine($"{iterations} iterations");
        Assert.InRange(iterations, 1, 40);

        var image = new double[nx * ny];
        for (var j = 0; j < ny; j++)
        {
            for (var i = 0; i < nx; i++)
            {
                var (right, up) = ((i + 1) % nx, (j + 1) % ny);
                var (c00, c10, c01, c11) = (j * nx + i, j * nx + right, up * nx + i, up * nx + right);
                Couple(c00, c10, kx[c00]);
                Couple(c00, c01, ky[c00]);
                if (corners)
                {
                    Couple(c00, c11, kc[c00]);
                    Couple(c10, c01, -kc[c00]);
                }
            }
        }

        void Couple(int a, int b, double k)
        {
            image[a] += k * (u[a] - u[b]);
            image[b] += k * (u[b] - u[a]);
        }

        for (var i = 0; i < f.Length; i++)
            Assert.Equal(f[i] - mean, image[i], 1e-8);
    }

    /// <summary>A weight that falls by twelve powers of ten and twice as fine a grid: iterations hardly grow.</summary>
    [Fact]
    public void Solve_SteepWeight_IterationsStayFew()
    {
        foreach (var n in new[] { 64, 128, 256, 512 })
        {
            var solver = Make(n, n, false, false, true, 80, WorkerTeam.Alone, out _, out _, out _);
            var f = new double[n * n];
            for (var i = 0; i < f.Length; i++)
            {
                var (x, y) = ((i % n + 0.5) / n, (i / n + 0.5) / n);
                f[i] = (x - 0.4) * Math.Exp(-80 * ((x - 0.4) * (x - 0.4) + (y - 0.6) * (y - 0.6)));
            }

            var u = new double[n * n];
            var clock = Stopwatch.StartNew();
            var iterations = solver.Solve(f, u, 1e-8, 100);
            output.WriteLine($"{n}²: {iterations} iterations, {clock.Elapsed.TotalMilliseconds:f1} ms");
            Assert.InRange(iterations, 1, 30);
        }
    }

    [Fact]
    public void Solve_AnyTeam_GivesTheSameBytesAndAllocatesNothing()
    {
        using var team = new WorkerTeam(3);
        var f = Enumerable.Range(0, 200 * 180).Select(i => Math.Sin(i)).ToArray();
        var (alone, shared) = (new double[f.Length], new double[f.Length]);
        var solver = Make(200, 180, true, false, true, 5, WorkerTeam.Alone, out _, out _, out _);
        solver.Solve(f, alone, 1e-6, 50);
        Make(200, 180, true, false, true, 5, team, out _, out _, out _).Solve(f, shared, 1e-6, 50);
        Assert.Equal(alone, shared);
        var before = GC.GetAllocatedBytesForCurrentThread();
        solver.Solve(f, alone, 1e-6, 50);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }
}
