using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Diagnostics;

/// <summary>Direction and concentration on a circle.</summary>
/// <param name="Mean">The point of the axis to which the mean of e^(iθ) points, θ = 2π(x − from)/length; NaN where that mean is 0.</param>
/// <param name="Resultant">|mean of e^(iθ)|: 1 for a point, 0 for a uniform density.</param>
public readonly record struct CircularMoments(double Mean, double Resultant);

/// <summary>Mass, mean and covariance of densities and of samples.</summary>
/// <remarks>
/// Of a density: sums over the cells with the position at the centre, as the equilibrium on the grid is defined (for a smooth density the midpoint
/// rule is accurate beyond all powers of the cell width). On a periodic axis they are the ordinary moments of x in [from, to), which depend on
/// where the circle is cut; <see cref="Circular(Density, bool)"/> does not.
/// </remarks>
public static class MomentMeasure
{
    /// <summary>Moments of a density.</summary>
    public static Moments Of(Density density)
    {
        ArgumentNullException.ThrowIfNull(density);
        return Of(density.Grid, density.Values);
    }

    /// <summary>Moments of cell averages on a grid; length the grid's cell count.</summary>
    /// <exception cref="ArgumentException">The length differs from the cell count.</exception>
    public static Moments Of(Grid grid, ReadOnlySpan<double> density)
    {
        ArgumentNullException.ThrowIfNull(grid);
        Require.Length(density.Length, grid.CellCount);
        // Row by row: mass and mean of the row, then the rows together by the law of total variance, so that nothing cancels.
        double mass = 0, sumX = 0, sumY = 0;
        for (var row = 0; row < grid.Ny; row++)
        {
            var (rowMass, rowX) = Line(density.Slice(row * grid.Nx, grid.Nx), grid.X);
            mass += rowMass;
            sumX += rowX;
            sumY += rowMass * (grid.Y?.Center(row) ?? 0);
        }

        var (meanX, meanY) = (sumX / mass, sumY / mass);
        double xx = 0, xy = 0, yy = 0;
        for (var row = 0; row < grid.Ny; row++)
        {
            var values = density.Slice(row * grid.Nx, grid.Nx);
            var offY = (grid.Y?.Center(row) ?? 0) - meanY;
            double rowMass = 0, rowX = 0, rowXX = 0;
            for (var i = 0; i < values.Length; i++)
            {
                var off = grid.X.Center(i) - meanX;
                rowMass += values[i];
                rowX += values[i] * off;
                rowXX += values[i] * off * off;
            }

            xx += rowXX;
            xy += rowX * offY;
            yy += rowMass * offY * offY;
        }

        return new Moments(mass * grid.CellVolume, meanX, xx / mass, grid.Y is null ? 0 : meanY, grid.Y is null ? 0 : yy / mass, grid.Y is null ? 0 : xy / mass);
    }

    /// <summary>Moments of samples as the law that gives each of them the same weight (divisor N), in two passes with compensated sums. Mass is 1.</summary>
    /// <param name="x">First coordinates, at least one.</param>
    /// <param name="y">Second coordinates, of the same length; empty in one dimension.</param>
    /// <exception cref="ArgumentException">There are no samples, or the lengths differ.</exception>
    public static Moments OfSamples(ReadOnlySpan<double> x, ReadOnlySpan<double> y = default)
    {
        Require.That(x.Length > 0, "The list of samples was empty; it must hold at least one.");
        if (y.Length > 0)
            Require.Length(y.Length, x.Length);
        CompensatedSum sumX = default, sumY = default;
        for (var i = 0; i < x.Length; i++)
            sumX.Add(x[i]);
        for (var i = 0; i < y.Length; i++)
            sumY.Add(y[i]);
        var (meanX, meanY) = (sumX.Total / x.Length, sumY.Total / x.Length);
        CompensatedSum xx = default, xy = default, yy = default;
        for (var i = 0; i < x.Length; i++)
        {
            var off = x[i] - meanX;
            xx.Add(off * off);
            if (y.Length == 0)
                continue;
            var offY = y[i] - meanY;
            xy.Add(off * offY);
            yy.Add(offY * offY);
        }

        return new Moments(1, meanX, xx.Total / x.Length, meanY, yy.Total / x.Length, xy.Total / x.Length);
    }

    /// <summary>Circular mean and resultant of a density along one axis, the other one summed out.</summary>
    /// <param name="density">The density.</param>
    /// <param name="alongY">Whether along the second axis.</param>
    public static CircularMoments Circular(Density density, bool alongY = false)
    {
        ArgumentNullException.ThrowIfNull(density);
        var grid = density.Grid;
        Require.That(!alongY || grid.Y is not null, "The second axis was asked for in one dimension; there must be two.");
        var axis = alongY ? grid.Y! : grid.X;
        double cosine = 0, sine = 0, mass = 0;
        for (var row = 0; row < grid.Ny; row++)
        {
            var values = density.Values.AsSpan(row * grid.Nx, grid.Nx);
            for (var i = 0; i < values.Length; i++)
            {
                var (s, c) = Math.SinCos(2 * Math.PI * ((alongY ? row : i) + 0.5) / axis.Cells);
                cosine += values[i] * c;
                sine += values[i] * s;
                mass += values[i];
            }
        }

        return Direction(cosine / mass, sine / mass, axis.Interval);
    }

    /// <summary>Circular mean and resultant of samples on a periodic axis.</summary>
    /// <exception cref="ArgumentException">There are no samples.</exception>
    public static CircularMoments CircularOfSamples(ReadOnlySpan<double> positions, Interval interval)
    {
        ArgumentNullException.ThrowIfNull(interval);
        Require.That(positions.Length > 0, "The list of samples was empty; it must hold at least one.");
        CompensatedSum cosine = default, sine = default;
        foreach (var position in positions)
        {
            var (s, c) = Math.SinCos(2 * Math.PI * (position - interval.From) / interval.Length);
            cosine.Add(c);
            sine.Add(s);
        }

        return Direction(cosine.Total / positions.Length, sine.Total / positions.Length, interval);
    }

    private static CircularMoments Direction(double cosine, double sine, Interval interval)
    {
        var resultant = Math.Sqrt(cosine * cosine + sine * sine);
        // Below rounding there is no direction.
        if (resultant < 1e-14)
            return new CircularMoments(double.NaN, resultant);
        var turn = Math.Atan2(sine, cosine) / (2 * Math.PI);
        return new CircularMoments(interval.From + (turn < 0 ? turn + 1 : turn) * interval.Length, resultant);
    }

    private static (double Mass, double First) Line(ReadOnlySpan<double> values, Axis axis)
    {
        double mass = 0, first = 0;
        for (var i = 0; i < values.Length; i++)
        {
            mass += values[i];
            first += values[i] * axis.Center(i);
        }

        return (mass, first);
    }

    // A. Neumaier, Z. Angew. Math. Mech. 54 (1974) 39-51.
    private struct CompensatedSum
    {
        private double sum;
        private double lost;

        public void Add(double value)
        {
            var next = sum + value;
            lost += Math.Abs(sum) >= Math.Abs(value) ? sum - next + value : value - next + sum;
            sum = next;
        }

        public readonly double Total => sum + lost;
    }
}
