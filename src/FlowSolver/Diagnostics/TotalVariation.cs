using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Diagnostics;

/// <summary>The total variation distance ½∫|ρ − σ|, from 0 to 1.</summary>
public static class TotalVariation
{
    /// <summary>Between two densities on one grid.</summary>
    /// <exception cref="ArgumentException">The grids differ.</exception>
    public static double Between(Density first, Density second)
    {
        ArgumentNullException.ThrowIfNull(first);
        ArgumentNullException.ThrowIfNull(second);
        Require.That(first.Grid == second.Grid, "The two densities were on different grids; they must be on one.");
        return Between(first.Grid, first.Values, second.Values);
    }

    /// <summary>Between two sets of cell averages on a grid.</summary>
    /// <exception cref="ArgumentException">A length differs from the cell count.</exception>
    public static double Between(Grid grid, ReadOnlySpan<double> first, ReadOnlySpan<double> second)
    {
        ArgumentNullException.ThrowIfNull(grid);
        Require.Length(first.Length, grid.CellCount);
        Require.Length(second.Length, grid.CellCount);
        Span<double> part = stackalloc double[8];
        part.Clear();
        for (var i = 0; i < first.Length; i++)
            part[i & 7] += Math.Abs(first[i] - second[i]);
        return 0.5 * SpanKernels.Sum(part) * grid.CellVolume;
    }
}
