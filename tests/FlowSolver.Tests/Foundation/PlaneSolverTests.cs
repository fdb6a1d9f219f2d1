using FlowSolver.Foundation;

namespace FlowSolver.Tests.Foundation;

/// <summary>
/// Alternating directions and GMRES on an operator with variable coefficients. Mutation tried: the rank-one correction of lines closed along x left
/// out; the cases with x on a circle took 32 products and more.
/// </summary>
public class PlaneSolverTests
{
    private sealed class Elliptic
    {
        private readonly WorkerTeam team;

        public Elliptic(int nx, int ny, bool wrapsX, bool wrapsY, double strength, WorkerTeam team)
        {
            this.team = team;
            Plane = new PaddedPlane(nx, ny, wrapsX, wrapsY);
            (DiffusionX, DriftX, DiffusionY, DriftY, Weights) = (Plane.NewField(), Plane.NewField(), Plane.NewField(), Plane.NewField(), Plane.NewField());
            for (var j = 0; j < ny; j++)
            {
                for (var i = 0; i < nx; i++)
                {
                    var at = Plane.Row(j) + i;
                    var (x, y) = (32.0 * i / nx, 32.0 * j / ny);
                    DiffusionX[at] = strength * (1 + 0.5 * Math.Sin(0.3 * x));
                    DiffusionY[at] = strength * (1 + 0.4 * Math.Cos(0.2 * y + 0.1 * x));
                    DriftX[at] = 6.0 / nx * strength * Math.Cos(0.11 * y);
                    DriftY[at] = -9.0 / ny * strength * Math.Sin(0.17 * x);
                    Weights[at] = 1 + 0.5 * Math.Sin(i + j);
                }
            }
        }

        public PaddedPlane Plane { get; }

        public double[] DiffusionX { get; }

        public double[] DriftX { get; }

        public double[] DiffusionY { get; }

        public double[] DriftY { get; }

        public double[] Weights { get; }

        public void Apply(double[] u, double[] result)
        {
            Plane.FillGhosts(u);
            var s = Plane.Stride;
            for (var j = 0; j < Plane.Ny; j++)
            {
                for (var i = Plane.Row(j); i < Plane.Row(j) + Plane.Nx; i++)
                {
                    result[i] = u[i] - DriftX[i] * (u[i + 1] - u[i - 1]) - DiffusionX[i] * (u[i + 1] - 2 * u[i] + u[i - 1])
                        - DriftY[i] * (u[i + s] - u[i - s]) - DiffusionY[i] * (u[i + s] - 2 * u[i] + u[i - s]);
                }
            }
        }

        public (int Products, double[] Solution, double Error) Solve(double strength)
        {
            var exact = Plane.NewField();
            for (var j = 0; j < Plane.Ny; j++)
            {
                for (var i = 0; i < Plane.Nx; i++)
                    exact[Plane.Row(j) + i] = Math.Sin(0.05 * i * j) + 0.1 * Math.Cos(2.1 * i);
            }

            var right = Plane.NewField();
            Apply(exact, right);
            var directions = new AlternatingDirections(Plane, team);
            directions.Prepare(DiffusionX, DriftX, DiffusionY, DriftY, strength);
            var krylov = new Gmres(Plane.Length, 20, team);
            var solution = Plane.NewField();
            var (products, residual) = krylov.Solve(right, solution, Weights, Apply, directions.Apply, 1e-11, 60);
            Assert.True(residual <= 1e-11, $"residual {residual:g3}");
            var error = 0.0;
            for (var j = 0; j < Plane.Ny; j++)
            {
                for (var i = Plane.Row(j); i < Plane.Row(j) + Plane.Nx; i++)
                    error = Math.Max(error, Math.Abs(solution[i] - exact[i]));
            }

            return (products, solution, error);
        }
    }

    [Theory]
    [InlineData(40, 33, false, false)]
    [InlineData(37, 48, true, false)]
    [InlineData(32, 29, false, true)]
    [InlineData(45, 52, true, true)]
    public void Solve_AnyEnds_FindsTheSolution(int nx, int ny, bool wrapsX, bool wrapsY)
    {
        var (products, _, error) = new Elliptic(nx, ny, wrapsX, wrapsY, 8, WorkerTeam.Alone).Solve(8);
        Assert.True(error < 1e-8, $"error {error:g3}");
        Assert.InRange(products, 2, 24);
    }

    [Fact]
    public void Solve_FinerGrids_TakeNoMoreProducts()
    {
        var counts = new List<int>();
        foreach (var cells in new[] { 32, 64, 128, 256 })
        {
            // The same operator on finer grids: diffusion per cell grows with the square of the cells.
            var strength = 2e-3 * cells * cells;
            counts.Add(new Elliptic(cells, cells, false, false, strength, WorkerTeam.Alone).Solve(strength).Products);
        }

        Assert.True(counts[^1] <= 1.5 * counts[0], string.Join(", ", counts));
    }

    [Fact]
    public void Solve_AnyTeam_GivesTheSameBytes()
    {
        using var team = new WorkerTeam(3);
        var alone = new Elliptic(70, 50, false, true, 5, WorkerTeam.Alone).Solve(5).Solution;
        var shared = new Elliptic(70, 50, false, true, 5, team).Solve(5).Solution;
        Assert.Equal(alone, shared);
    }

    [Fact]
    public void Factor_BandedMatrix_SolvesItsSystem()
    {
        const int order = 57;
        const int band = 9;
        var matrix = new BandedCholesky(order, band);
        var dense = new double[order, order];
        for (var i = 0; i < order; i++)
        {
            for (var j = Math.Max(0, i - band); j <= i; j++)
            {
                var value = i == j ? 12 + i % 3 : Math.Sin(i * 1.7 + j);
                matrix.Add(i, j, value);
                dense[i, j] = dense[j, i] = value;
            }
        }

        var right = new double[order];
        for (var i = 0; i < order; i++)
        {
            for (var j = 0; j < order; j++)
                right[i] += dense[i, j] * (j + 1);
        }

        Assert.True(matrix.Factor());
        matrix.Solve(right);
        for (var j = 0; j < order; j++)
            Assert.Equal(j + 1, right[j], 1e-9);
        Assert.Throws<ArgumentException>(() => matrix.Add(20, 3, 1));
    }

    [Fact]
    public void Factor_IndefiniteMatrix_SaysNo()
    {
        var matrix = new BandedCholesky(2, 1);
        matrix.Add(0, 0, 1);
        matrix.Add(1, 0, 2);
        matrix.Add(1, 1, 1);
        Assert.False(matrix.Factor());
    }
}
