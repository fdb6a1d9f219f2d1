using FlowSolver.Foundation;
using MathNet.Numerics.LinearAlgebra;

namespace FlowSolver.Tests.Foundation;

/// <summary>
/// Mutations tried and seen to fail: diagonal links of the coarse network left out; the shares of the column to the right dropped from restriction;
/// elimination without joining the neighbours; the last cell held instead of the heaviest.
/// </summary>
public class NetworkMultigridTests
{
    // Conductances over many orders of magnitude, as of a landscape with walls.
    private static GridNetwork Random(int nx, int ny, bool wrapsX, bool wrapsY, bool grounded, double spread, int seed = 5)
    {
        var random = new Random(seed);
        var (linkX, linkY, ground, mass) = (new double[nx * ny], new double[ny == 1 ? 0 : nx * ny], new double[nx * ny], new double[nx * ny]);
        double Weight(double i, double j) => Math.Exp(-spread * (Math.Pow(i / nx - 0.45, 2) + Math.Pow(j / ny - 0.5, 2) + 0.3 * Math.Sin(9.0 * i / nx) * Math.Cos(7.0 * j / ny)));
        for (var j = 0; j < ny; j++)
        {
            for (var i = 0; i < nx; i++)
            {
                var cell = j * nx + i;
                mass[cell] = Weight(i, j);
                linkX[cell] = i == nx - 1 && !wrapsX ? 0 : Weight(i + 0.5, j) * (0.9 + 0.2 * random.NextDouble());
                if (ny > 1)
                    linkY[cell] = j == ny - 1 && !wrapsY ? 0 : Weight(i, j + 0.5) * (0.9 + 0.2 * random.NextDouble());
                if (grounded && i < 2 && j < 3)
                    ground[cell] = mass[cell];
            }
        }

        return new GridNetwork(nx, ny, linkX, linkY, ground, mass);
    }

    private static Matrix<double> Dense(GridNetwork network)
    {
        var matrix = Matrix<double>.Build.Dense(network.Count, network.Count);
        var (unit, column) = (new double[network.Count], new double[network.Count]);
        for (var j = 0; j < network.Count; j++)
        {
            Array.Clear(unit);
            unit[j] = 1;
            network.Apply(unit, column);
            matrix.SetColumn(j, column);
        }

        return matrix;
    }

    [Theory]
    [InlineData(9, 7, false, false)]
    [InlineData(8, 6, true, false)]
    [InlineData(7, 9, true, true)]
    [InlineData(10, 12, false, true)]
    [InlineData(1, 14, false, true)]
    [InlineData(1, 11, false, false)]
    public void Apply_SmallNetwork_IsDirectSolution(int nx, int ny, bool wrapsX, bool wrapsY)
    {
        var network = Random(nx, ny, wrapsX, wrapsY, true, 10);
        var dense = Dense(network);
        Assert.True((dense - dense.Transpose()).L1Norm() < 1e-14);
        var f = new double[network.Count];
        for (var i = 0; i < f.Length; i++)
            f[i] = network.Weights[i] * Math.Sin(i + 1);
        var multigrid = new NetworkMultigrid(network);
        var u = new double[f.Length];
        multigrid.Apply(f, u, multigrid.NewWorkspace());
        var expected = dense.Solve(Vector<double>.Build.Dense(f));
        for (var i = 0; i < f.Length; i++)
            Assert.Equal(expected[i], u[i], 1e-9 * expected.AbsoluteMaximum());
    }

    [Theory]
    [InlineData(64, 64, false, false, 0)]
    [InlineData(65, 50, false, false, 40)]
    [InlineData(64, 48, true, false, 60)]
    [InlineData(61, 64, false, true, 60)]
    [InlineData(63, 57, true, true, 60)]
    [InlineData(200, 40, false, false, 40)]
    [InlineData(64, 64, false, false, 80)]
    public void Solve_ConductancesOverManyOrders_TakesFewIterations(int nx, int ny, bool wrapsX, bool wrapsY, double spread)
    {
        foreach (var grounded in new[] { true, false })
        {
            var network = Random(nx, ny, wrapsX, wrapsY, grounded, spread);
            var f = new double[network.Count];
            double sum = 0, mass = 0;
            for (var i = 0; i < f.Length; i++)
            {
                f[i] = network.Weights[i] * Math.Sin(0.37 * i + 1);
                sum += f[i];
                mass += network.Weights[i];
            }

            for (var i = 0; i < f.Length && !grounded; i++)
                f[i] -= network.Weights[i] * (sum / mass);
            // Against elimination on the whole grid, which never subtracts.
            var (u, exact) = (new double[f.Length], new double[f.Length]);
            var (iterations, error) = new NetworkMultigrid(network, 100).Solve(f, u, 1e-9, 100);
            Assert.True(iterations <= 9, $"grounded {grounded}: {iterations} iterations, error {error:g3}");
            var direct = new NetworkMultigrid(network, int.MaxValue);
            direct.Apply(f, exact, direct.NewWorkspace());
            if (!grounded)
                RemoveMean(network, u, exact);
            double apart = 0, whole = 0;
            for (var i = 0; i < f.Length; i++)
            {
                apart += network.Weights[i] * (u[i] - exact[i]) * (u[i] - exact[i]);
                whole += network.Weights[i] * exact[i] * exact[i];
            }

            Assert.True(apart <= 1e-15 * whole, $"grounded {grounded}: apart by {Math.Sqrt(apart / whole):g3}");
        }
    }

    private static void RemoveMean(GridNetwork network, params ReadOnlySpan<double[]> fields)
    {
        var total = SpanKernels.Sum(network.Weights);
        foreach (var field in fields)
        {
            var mean = SpanKernels.Dot(network.Weights, field) / total;
            for (var i = 0; i < field.Length; i++)
                field[i] -= mean;
        }
    }

    [Fact]
    public void Solve_FlatCells_AreHalvedAlongTheirNarrowSide()
    {
        var (nx, ny) = (128, 64);
        var (linkX, linkY, ground, mass) = (new double[nx * ny], new double[nx * ny], new double[nx * ny], new double[nx * ny]);
        for (var cell = 0; cell < nx * ny; cell++)
        {
            linkX[cell] = cell % nx == nx - 1 ? 0 : 64;
            linkY[cell] = cell / nx == ny - 1 ? 0 : 1;
            mass[cell] = 1;
        }

        ground[0] = 1;
        var multigrid = new NetworkMultigrid(new GridNetwork(nx, ny, linkX, linkY, ground, mass, 8));
        Assert.Equal(64, multigrid.Networks[1].Nx);
        Assert.Equal(64, multigrid.Networks[1].Ny);
        var u = new double[nx * ny];
        var (iterations, _) = multigrid.Solve(mass, u, 1e-10, 60);
        Assert.True(iterations <= 14, $"{iterations} iterations");
    }

    [Fact]
    public void Energy_AnyField_IsItsQuadraticForm()
    {
        foreach (var network in new NetworkMultigrid(Random(20, 18, true, false, true, 5), 30).Networks)
        {
            var (u, ku) = (new double[network.Count], new double[network.Count]);
            for (var i = 0; i < u.Length; i++)
                u[i] = Math.Cos(1.7 * i);
            network.Apply(u, ku);
            Assert.Equal(1, SpanKernels.Dot(u, ku) / network.Energy(u), 1e-12);
        }
    }

    /// <summary>A chain of conductances e^(−40) … e^(40): times to leave it by the sums in closed form, relative accuracy 1e-13.</summary>
    [Fact]
    public void Apply_ChainOfTinyAndHugeConductances_KeepsEveryDigit()
    {
        const int count = 81;
        var (links, ground, mass) = (new double[count], new double[count], new double[count]);
        for (var i = 0; i < count - 1; i++)
            links[i] = Math.Exp(40 * Math.Cos(0.31 * i));
        ground[0] = 1e-20;
        Array.Fill(mass, 1);
        var multigrid = new NetworkMultigrid(new GridNetwork(1, count, new double[count], links, ground, mass));
        var u = new double[count];
        multigrid.Apply(mass, u, multigrid.NewWorkspace());
        var expected = count / 1e-20;
        for (var i = 0; i < count; i++)
        {
            Assert.Equal(1, u[i] / expected, 1e-13);
            if (i < count - 1)
                expected += (count - 1 - i) / links[i];
        }
    }

    [Fact]
    public void Find_SmallNetworks_AgreesWithDenseEigenvalues()
    {
        foreach (var (nx, ny, wrapsX, wrapsY) in new[] { (16, 14, false, false), (15, 16, true, false), (14, 17, true, true) })
        {
            var network = Random(nx, ny, wrapsX, wrapsY, false, 20);
            var root = Vector<double>.Build.Dense(network.Count, i => Math.Sqrt(network.Weights[i]));
            var symmetric = Matrix<double>.Build.DiagonalOfDiagonalVector(1 / root) * Dense(network) * Matrix<double>.Build.DiagonalOfDiagonalVector(1 / root);
            var expected = symmetric.Evd(Symmetricity.Symmetric).EigenValues.Select(value => value.Real).Order().ToArray();
            var found = new SmallestModes(network, 1e-3, WorkerTeam.Alone, 130).Find(8);
            Assert.True(found.Converged);
            for (var k = 0; k < 8; k++)
                Assert.Equal(1, found.Rates[k] / expected[k + 1], 1e-9);
            using var team = new WorkerTeam(3);
            Assert.Equal(found.Rates, new SmallestModes(network, 1e-3, team, 130).Find(8).Rates);
        }
    }

    [Fact]
    public void Decompose_GradedMatrix_KeepsSmallEigenvalues()
    {
        // DHD with H near 1: eigenvalues over 16 orders; the product of all is the determinant.
        double[] scale = [1, 1e-3, 1e-5, 1e-8];
        var matrix = new double[16];
        for (var i = 0; i < 4; i++)
        {
            for (var j = 0; j < 4; j++)
                matrix[i * 4 + j] = scale[i] * scale[j] * (i == j ? 1 : 0.3 / (1 + Math.Abs(i - j)));
        }

        // det H by elimination on the well-scaled matrix.
        var h = Matrix<double>.Build.Dense(4, 4, (i, j) => i == j ? 1 : 0.3 / (1 + Math.Abs(i - j)));
        var (values, vectors) = (new double[4], new double[16]);
        SymmetricEigen.Decompose(matrix, values, vectors);
        Assert.Equal(1, values[0] * values[1] * values[2] * values[3] / (h.Determinant() * 1e-32), 1e-12);
        Assert.True(values[0] > 0 && values[0] < values[1] && values[2] < values[3]);
    }
}
