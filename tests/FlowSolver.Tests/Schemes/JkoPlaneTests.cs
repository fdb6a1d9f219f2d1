using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Jko;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Schemes;

/// <summary>JKO steps in the plane.</summary>
public class JkoPlaneTests
{
    private static (GridProblem Problem, FlowRun Run) Begin(Problem problem, int cells, JkoScheme? scheme = null)
    {
        var grid = new Grid(new Axis(problem.Domain.X, cells), new Axis(problem.Domain.Y!, cells));
        var onGrid = new GridProblem(problem, grid);
        return (onGrid, (scheme ?? new JkoScheme()).Begin(onGrid, StartOnGrid.Create(problem.Start, grid), WorkerTeam.Alone));
    }

    private static (double Xx, double Xy, double Yy) Covariance(Density density)
    {
        double x = 0, y = 0, xx = 0, xy = 0, yy = 0;
        for (var j = 0; j < density.Grid.Ny; j++)
        {
            for (var i = 0; i < density.Grid.Nx; i++)
            {
                var mass = density.Values[j * density.Grid.Nx + i] * density.Grid.CellVolume;
                var (a, b) = (density.Grid.X.Center(i), density.Grid.Y!.Center(j));
                x += mass * a;
                y += mass * b;
                xx += mass * a * a;
                xy += mass * a * b;
                yy += mass * b * b;
            }
        }

        return (xx - x * x, xy - x * y, yy - y * y);
    }

    /// <summary>
    /// (I + τQ − τT S⁻¹) S (I + τQ − τT S⁻¹) = S₀ for a Gaussian start and V = xᵀQx/2, matrices that do not commute; derived from the optimality
    /// condition of the step and solved to 2·10⁻⁸ beforehand.
    /// Mutation tried: a factor 1.001 on the mixed derivative in the equation's determinant; the residual of the recursion rose to 1e-5.
    /// </summary>
    [Fact]
    public void Advance_GaussianInQuadratic_FollowsMatrixRecursion()
    {
        const double tau = 0.2;
        const double temperature = 0.5;
        var problem = new Problem(new PlanePotential(2, 0.6, 1), temperature, new Domain(new Interval(-7, 7), new Interval(-7, 7)),
            new GaussianStart(0, 1, 0, 0.4, 0.3));
        var (_, run) = Begin(problem, 128);
        var report = run.Advance(tau);
        Assert.Null(report.Failure);
        var (xx, xy, yy) = Covariance(run.Snapshot());
        Assert.Equal(0.62489853, xx, 1e-6);
        Assert.Equal(0.09760084, xy, 1e-6);
        Assert.Equal(0.40065709, yy, 1e-6);

        // Two more steps, checked by the recursion itself.
        for (var k = 0; k < 2; k++)
        {
            var before = (xx, xy, yy);
            run.Advance(tau);
            (xx, xy, yy) = Covariance(run.Snapshot());
            var determinant = xx * yy - xy * xy;
            var (a, b, d) = (1 + tau * (2 - temperature * yy / determinant), tau * (0.6 + temperature * xy / determinant), 1 + tau * (1 - temperature * xx / determinant));
            var (p, q, r, s) = (a * xx + b * xy, a * xy + b * yy, b * xx + d * xy, b * xy + d * yy);
            Assert.Equal(before.xx, p * a + q * b, 1e-6);
            Assert.Equal(before.xy, p * b + q * d, 1e-6);
            Assert.Equal(before.yy, r * b + s * d, 1e-6);
        }
    }
}

/// <summary>
/// The conformance suite. Mutation tried: see <see cref="JkoPlaneTests"/>; and the new density left unnormalised, which breaks the mass.
/// </summary>
public class JkoPlaneConformance : FlowSchemeConformance
{
    protected override FlowScheme Scheme { get; } = new JkoScheme();

    /// <summary>Below 48 cells the start is narrower than two cells and is put on the grid by averages; above, by centre values: no common order.</summary>
    protected override int[] CellsForOrder(int dimension) => dimension == 1 ? base.CellsForOrder(1) : [48, 96, 192];
}
