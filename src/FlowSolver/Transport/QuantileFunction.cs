using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Cumulative mass and quantiles of a one-dimensional density that is constant in each cell. Immutable.
/// </summary>
public sealed class QuantileFunction
{
    private readonly double[] cumulative;
    private readonly Axis axis;

    /// <summary>Adds up the masses; the density need not be normalised, and entries below 0 count as 0.</summary>
    /// <exception cref="ArgumentException">The density is two-dimensional, not a number, or without mass.</exception>
    public QuantileFunction(Density density)
    {
        ArgumentNullException.ThrowIfNull(density);
        RequireLine(density.Grid);
        axis = density.Grid.X;
        cumulative = new double[axis.Cells + 1];
        DoubleDouble sum = 0;
        for (var i = 0; i < axis.Cells; i++)
        {
            var value = density.Values[i];
            if (double.IsNaN(value))
                throw new ArgumentException($"The density was not a number in cell {i}; it must be finite and not below 0.");
            sum += Math.Max(value, 0);
            cumulative[i + 1] = sum.High;
        }

        Require.That(sum.High > 0 && double.IsFinite(sum.High), $"The sum of the density's values was {sum.High}; it must be finite and above 0.");
        for (var i = 0; i < cumulative.Length; i++)
            cumulative[i] /= sum.High;
    }

    /// <summary>Cumulative mass at the cell edges, from 0 to 1; length cells + 1.</summary>
    public ReadOnlySpan<double> MassAtEdges => cumulative;

    /// <summary>The share of the mass below a position: 0 left of the axis, 1 right of it.</summary>
    public double MassBelow(double position)
    {
        var place = (position - axis.Interval.From) / axis.Width;
        if (!(place > 0))
            return 0;
        if (place >= axis.Cells)
            return 1;
        var cell = (int)place;
        return cumulative[cell] + (place - cell) * (cumulative[cell + 1] - cumulative[cell]);
    }

    /// <summary>The lowest position with at least <paramref name="mass"/> below it; for mass 0 the lower end of the support.</summary>
    /// <param name="mass">0 … 1.</param>
    public double Position(double mass)
    {
        var (low, high) = (0, axis.Cells);
        // Invariant: cumulative[low] < mass <= cumulative[high], where mass is above 0.
        while (high - low > 1)
        {
            var middle = (low + high) >>> 1;
            if (mass > 0 ? cumulative[middle] < mass : cumulative[middle] <= 0)
                low = middle;
            else
                high = middle;
        }

        var inCell = cumulative[low + 1] - cumulative[low];
        var share = inCell > 0 ? Math.Clamp((mass - cumulative[low]) / inCell, 0, 1) : 0;
        return axis.Interval.From + (low + share) * axis.Width;
    }

    internal static void RequireLine(Grid grid)
    {
        if (grid.Dimension != 1)
            throw new ArgumentException($"The density had dimension {grid.Dimension}; it must be 1.");
    }
}
