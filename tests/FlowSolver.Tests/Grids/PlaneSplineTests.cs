using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Grids;

/// <summary>
/// The bicubic spline: exact where it should be, fourth order elsewhere. Mutation tried: 4 in place of 5 at the end of the elimination at a wall;
/// the error no longer fell with the cells.
/// </summary>
public class PlaneSplineTests
{
    private static (PlaneSpline Spline, Grid Grid) Fit(int nx, int ny, AxisEnds endsX, AxisEnds endsY, Func<double, double, double> function, bool free)
    {
        var grid = new Grid(new Axis(new Interval(0, 1, endsX), nx), new Axis(new Interval(0, 2, endsY), ny));
        var plane = new PaddedPlane(nx, ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic);
        var field = plane.NewField();
        for (var j = 0; j < ny; j++)
        {
            for (var i = 0; i < nx; i++)
                field[plane.Row(j) + i] = function(grid.X.Center(i), grid.Y.Center(j));
        }

        var spline = new PlaneSpline(grid, plane, WorkerTeam.Alone);
        spline.Fit(field, free);
        return (spline, grid);
    }

    [Theory]
    [InlineData(AxisEnds.Reflecting, AxisEnds.Reflecting)]
    [InlineData(AxisEnds.Periodic, AxisEnds.Reflecting)]
    [InlineData(AxisEnds.Reflecting, AxisEnds.Periodic)]
    [InlineData(AxisEnds.Periodic, AxisEnds.Periodic)]
    public void Evaluate_SmoothEvenOrPeriodicField_ConvergesAtFourthOrder(AxisEnds endsX, AxisEnds endsY)
    {
        // Even across 0 and 1 (0 and 2), and periodic as well.
        static double Function(double x, double y) => Math.Cos(2 * Math.PI * x) * (1 + 0.3 * Math.Cos(Math.PI * y));
        int[] cells = [20, 40, 80];
        var observed = ObservedOrder.Measure([.. cells.Select(n => 1.0 / n)], size =>
        {
            var n = (int)Math.Round(1 / size);
            var (spline, _) = Fit(n, n + 3, endsX, endsY, Function, free: false);
            var worst = 0.0;
            for (var k = 0; k < 400; k++)
            {
                var (x, y) = (k * 0.618033988749895 % 1, 2 * (k * 0.754877666246693 % 1));
                var jet = spline.At(x, y);
                worst = Math.Max(worst, Math.Abs(jet.Value - Function(x, y)));
                var gradient = -2 * Math.PI * Math.Sin(2 * Math.PI * x) * (1 + 0.3 * Math.Cos(Math.PI * y));
                worst = Math.Max(worst, Math.Abs(jet.GradientX - gradient) * size);
            }

            return worst;
        });
        observed.AssertAtLeast(3.8);
    }

    [Fact]
    public void Evaluate_FreeEnds_ReproducesQuadraticsUpToTheWall()
    {
        static double Function(double x, double y) => 3 + 2 * x - y + 4 * x * x - 1.5 * x * y + 0.7 * y * y;
        var (spline, _) = Fit(17, 12, AxisEnds.Reflecting, AxisEnds.Reflecting, Function, free: true);
        foreach (var (x, y) in new[] { (0.0, 0.0), (1.0, 2.0), (0.003, 1.99), (0.5, 0.01), (0.77, 1.3) })
        {
            var jet = spline.At(x, y);
            Assert.Equal(Function(x, y), jet.Value, 1e-11);
            Assert.Equal(2 + 8 * x - 1.5 * y, jet.GradientX, 1e-9);
            Assert.Equal(-1 - 1.5 * x + 1.4 * y, jet.GradientY, 1e-9);
            Assert.Equal(8, jet.HessianXX, 1e-8);
            Assert.Equal(-1.5, jet.HessianXY, 1e-8);
            Assert.Equal(1.4, jet.HessianYY, 1e-8);
        }
    }

    [Fact]
    public void Evaluate_ManyPoints_AgreesWithOne()
    {
        var (spline, _) = Fit(16, 24, AxisEnds.Periodic, AxisEnds.Reflecting, (x, y) => Math.Sin(2 * Math.PI * x) + y * y, free: false);
        double[] x = [-0.3, 0.01, 0.5, 0.999, 1.7];
        double[] y = [0.1, -0.5, 1.0, 2.5, 1.99];
        var (value, gx, gy) = (new double[5], new double[5], new double[5]);
        spline.Evaluate(x, y, value, gx, gy);
        for (var k = 0; k < 5; k++)
        {
            var jet = spline.At(x[k], y[k]);
            Assert.Equal(jet.Value, value[k], 1e-14);
            Assert.Equal(jet.GradientX, gx[k], 1e-12);
            Assert.Equal(jet.GradientY, gy[k], 1e-12);
        }
    }

    [Fact]
    public void Average_CoarserGrid_KeepsMassAndConstants()
    {
        var fine = new Grid(new Axis(new Interval(0, 1), 30), new Axis(new Interval(0, 2), 25));
        var coarse = new Grid(new Axis(new Interval(0, 1), 8), new Axis(new Interval(0, 2), 10));
        var values = new double[fine.CellCount];
        for (var i = 0; i < values.Length; i++)
            values[i] = 1 + Math.Sin(i);
        var result = new double[coarse.CellCount];
        PlaneRestriction.Average(fine, values, coarse, result);
        Assert.Equal(values.Sum() * fine.CellVolume, result.Sum() * coarse.CellVolume, 1e-12);
        Array.Fill(values, 2.5);
        PlaneRestriction.Average(fine, values, coarse, result);
        Assert.All(result, value => Assert.Equal(2.5, value, 1e-12));
    }
}
