using FlowSolver.Foundation;
using FlowSolver.Problems;
using SpecialFunctions = MathNet.Numerics.SpecialFunctions;

namespace FlowSolver.Grids;

/// <summary>Puts a start density on a grid.</summary>
/// <remarks>
/// Where a start is smooth on the scale of a cell its value at the centre is used: centre value and cell average then differ by the square of the
/// cell width, as the schemes themselves do, and sums over centres are the better moments. Where it is not (a normal density with a deviation
/// below 2 cells, a function with a jump) the cell average is used: by erf along an axis, by quadrature elsewhere.
/// </remarks>
public static class StartOnGrid
{
    private const double ResolvedDeviation = 2.0;
    private static readonly double[] GaussNodes = [-0.9061798459386640, -0.5384693101056831, 0, 0.5384693101056831, 0.9061798459386640];
    private static readonly double[] GaussWeights = [0.2369268850561891, 0.4786286704993665, 0.5688888888888889, 0.4786286704993665, 0.2369268850561891];

    /// <summary>The start as a density of mass 1.</summary>
    /// <exception cref="InputException">The start is negative or not finite somewhere, or has no mass on the domain.</exception>
    public static Density Create(StartDensity start, Grid grid)
    {
        ArgumentNullException.ThrowIfNull(start);
        ArgumentNullException.ThrowIfNull(grid);
        var values = start switch
        {
            GaussianStart gaussian => Gaussian(gaussian, grid),
            FunctionStart function => Function(function, grid),
            SamplesStart samples => Histogram(samples, grid),
            _ => throw new ArgumentException($"The start was a {start.GetType().Name}; it must be one of the kinds in FlowSolver.Problems."),
        };
        var mass = SpanKernels.Sum(values) * grid.CellVolume;
        if (!(mass > 0) || !double.IsFinite(mass))
        {
            throw new InputException(new InputFault(
                "The start density has no mass on the domain; it must be above 0 somewhere inside.", "Move the start or widen the domain.", Key: "start"));
        }

        SpanKernels.Scale(values, 1 / mass);
        return new Density(grid, values);
    }

    private static double[] Gaussian(GaussianStart start, Grid grid)
    {
        if (grid.Y is null || start.Covariance == 0)
        {
            var alongX = GaussianAlong(start.MeanX, start.VarianceX, grid.X);
            if (grid.Y is null)
                return alongX;
            var alongY = GaussianAlong(start.MeanY, start.VarianceY, grid.Y);
            var product = new double[grid.CellCount];
            for (var row = 0; row < grid.Ny; row++)
            {
                for (var i = 0; i < grid.Nx; i++)
                    product[row * grid.Nx + i] = alongX[i] * alongY[row];
            }

            return product;
        }

        return CorrelatedGaussian(start, grid, grid.Y);
    }

    private static double[] GaussianAlong(double mean, double variance, Axis axis)
    {
        var deviation = Math.Sqrt(variance);
        var values = new double[axis.Cells];
        var images = axis.IsPeriodic ? (int)Math.Ceiling(40 * deviation / axis.Interval.Length) + 1 : 0;
        for (var image = -images; image <= images; image++)
        {
            var center = mean + image * axis.Interval.Length;
            for (var i = 0; i < values.Length; i++)
            {
                if (deviation >= ResolvedDeviation * axis.Width)
                {
                    var z = (axis.Center(i) - center) / deviation;
                    values[i] += Math.Exp(-0.5 * z * z) / (deviation * Math.Sqrt(2 * Math.PI));
                    continue;
                }

                var lower = (axis.Edge(i) - center) / (deviation * Math.Sqrt(2));
                var upper = (axis.Edge(i + 1) - center) / (deviation * Math.Sqrt(2));
                // The complementary function on the far side keeps relative accuracy in the tails.
                var twice = lower > 0 ? SpecialFunctions.Erfc(lower) - SpecialFunctions.Erfc(upper)
                    : upper < 0 ? SpecialFunctions.Erfc(-upper) - SpecialFunctions.Erfc(-lower)
                    : SpecialFunctions.Erf(upper) - SpecialFunctions.Erf(lower);
                values[i] += 0.5 * twice / axis.Width;
            }
        }

        return values;
    }

    private static double[] CorrelatedGaussian(GaussianStart start, Grid grid, Axis axisY)
    {
        var determinant = start.VarianceX * start.VarianceY - start.Covariance * start.Covariance;
        var (pxx, pxy, pyy) = (start.VarianceY / determinant, -start.Covariance / determinant, start.VarianceX / determinant);
        // Narrowest width across either axis: 1/√p is the deviation along an axis with the other coordinate held.
        var resolved = 1 / Math.Sqrt(pxx) >= ResolvedDeviation * grid.X.Width && 1 / Math.Sqrt(pyy) >= ResolvedDeviation * axisY.Width;
        var parts = resolved ? 0 : (int)Math.Clamp(
            Math.Ceiling(2 * Math.Max(grid.X.Width * Math.Sqrt(pxx), axisY.Width * Math.Sqrt(pyy))), 1, 64);
        var imagesX = grid.X.IsPeriodic ? (int)Math.Ceiling(40 * Math.Sqrt(start.VarianceX) / grid.X.Interval.Length) + 1 : 0;
        var imagesY = axisY.IsPeriodic ? (int)Math.Ceiling(40 * Math.Sqrt(start.VarianceY) / axisY.Interval.Length) + 1 : 0;
        var norm = 1 / (2 * Math.PI * Math.Sqrt(determinant));

        double At(double x, double y)
        {
            var sum = 0.0;
            for (var a = -imagesX; a <= imagesX; a++)
            {
                for (var b = -imagesY; b <= imagesY; b++)
                {
                    var dx = x - start.MeanX - a * grid.X.Interval.Length;
                    var dy = y - start.MeanY - b * axisY.Interval.Length;
                    sum += Math.Exp(-0.5 * (pxx * dx * dx + 2 * pxy * dx * dy + pyy * dy * dy));
                }
            }

            return norm * sum;
        }

        var values = new double[grid.CellCount];
        for (var row = 0; row < grid.Ny; row++)
        {
            for (var i = 0; i < grid.Nx; i++)
            {
                values[row * grid.Nx + i] = resolved
                    ? At(grid.X.Center(i), axisY.Center(row))
                    : CellAverage(At, grid.X.Center(i), grid.X.Width, axisY.Center(row), axisY.Width, parts);
            }
        }

        return values;
    }

    private static double CellAverage(Func<double, double, double> function, double x, double widthX, double y, double widthY, int parts)
    {
        var sum = 0.0;
        for (var a = 0; a < parts; a++)
        {
            for (var b = 0; b < parts; b++)
            {
                var centerX = x + widthX * ((a + 0.5) / parts - 0.5);
                var centerY = y + widthY * ((b + 0.5) / parts - 0.5);
                for (var p = 0; p < GaussNodes.Length; p++)
                {
                    for (var q = 0; q < GaussNodes.Length; q++)
                    {
                        sum += GaussWeights[p] * GaussWeights[q] * function(
                            centerX + 0.5 * widthX / parts * GaussNodes[p], centerY + 0.5 * widthY / parts * GaussNodes[q]);
                    }
                }
            }
        }

        return sum / (4.0 * parts * parts);
    }

    private static double[] Function(FunctionStart start, Grid grid)
    {
        var centers = grid.Sample(start.Function);
        CheckStart(centers, grid, start);
        var averages = FunctionAverages(start, grid);
        CheckStart(averages, grid, start);
        var largest = SpanKernels.MaxAbs(averages);
        var difference = 0.0;
        for (var i = 0; i < averages.Length; i++)
            difference = Math.Max(difference, Math.Abs(averages[i] - centers[i]));
        // A normal density of deviation 2 cells differs from its averages by about 1 %: the same border as for a Gaussian start.
        return start.IsSmooth && difference <= 0.0104 * largest ? centers : averages;
    }

    private static double[] FunctionAverages(FunctionStart start, Grid grid)
    {
        // Four sub-cells an axis with 5-point Gauss each: a jump inside a cell is then placed to within 1/80 of it.
        const int parts = 4;
        var averages = new double[grid.CellCount];
        var offsets = new double[parts * GaussNodes.Length];
        var weights = new double[offsets.Length];
        for (var a = 0; a < parts; a++)
        {
            for (var p = 0; p < GaussNodes.Length; p++)
            {
                offsets[a * GaussNodes.Length + p] = (a + 0.5) / parts - 0.5 + 0.5 / parts * GaussNodes[p];
                weights[a * GaussNodes.Length + p] = GaussWeights[p] / (2.0 * parts);
            }
        }

        var x = new double[grid.Nx];
        var y = new double[grid.Y is null ? 0 : grid.Nx];
        var value = new double[grid.Nx];
        for (var row = 0; row < grid.Ny; row++)
        {
            var target = averages.AsSpan(row * grid.Nx, grid.Nx);
            for (var q = 0; q < (grid.Y is null ? 1 : offsets.Length); q++)
            {
                if (grid.Y is not null)
                    y.AsSpan().Fill(grid.Y.Center(row) + offsets[q] * grid.Y.Width);
                for (var p = 0; p < offsets.Length; p++)
                {
                    for (var i = 0; i < x.Length; i++)
                        x[i] = grid.X.Center(i) + offsets[p] * grid.X.Width;
                    start.Function(x, y, value);
                    SpanKernels.AddScaled(target, weights[p] * (grid.Y is null ? 1 : weights[q]), value);
                }
            }
        }

        return averages;
    }

    private static void CheckStart(double[] values, Grid grid, FunctionStart start)
    {
        for (var i = 0; i < values.Length; i++)
        {
            if (double.IsFinite(values[i]) && values[i] >= 0)
                continue;
            var place = FormattableString.Invariant($"x = {grid.X.Center(i % grid.Nx)}")
                + (grid.Y is null ? "" : FormattableString.Invariant($", y = {grid.Y.Center(i / grid.Nx)}"));
            var found = double.IsNaN(values[i]) ? "not a number" : FormattableString.Invariant($"{values[i]}");
            throw new InputException(new InputFault(
                $"The start density \"{start.Text}\" was {found} near {place}; it must be finite and not negative on the whole domain.",
                "Change the formula or the domain.", Key: "start.density"));
        }
    }

    private static double[] Histogram(SamplesStart samples, Grid grid)
    {
        Require.That(samples.X.Length > 0, "The list of start samples was empty; it must hold at least one.");
        Require.That(grid.Y is null == samples.Y is null, "Start samples and grid differ in dimension; they must agree.");
        var values = new double[grid.CellCount];
        for (var k = 0; k < samples.X.Length; k++)
        {
            var x = grid.X.IsPeriodic ? grid.X.Interval.Fold(samples.X[k]) : samples.X[k];
            var y = grid.Y is null ? 0 : grid.Y.IsPeriodic ? grid.Y.Interval.Fold(samples.Y![k]) : samples.Y![k];
            if (grid.X.Interval.Contains(x) && (grid.Y is null || grid.Y.Interval.Contains(y)))
                values[(grid.Y is null ? 0 : grid.Y.CellOf(y)) * grid.Nx + grid.X.CellOf(x)]++;
        }

        return values;
    }
}
