using FlowSolver.Foundation;

namespace FlowSolver.Grids;

/// <summary>Cell averages on one grid from those on another over the same rectangle: masses follow the overlap of the cells, axis by axis.</summary>
public static class PlaneRestriction
{
    /// <summary>Writes the averages on the target grid; mass is kept to rounding.</summary>
    /// <param name="source">A grid in two dimensions.</param>
    /// <param name="values">Its cell averages, x fastest.</param>
    /// <param name="target">Another grid on the same rectangle.</param>
    /// <param name="result">Receives its cell averages.</param>
    public static void Average(Grid source, ReadOnlySpan<double> values, Grid target, Span<double> result)
    {
        ArgumentNullException.ThrowIfNull(source);
        ArgumentNullException.ThrowIfNull(target);
        Require.That(source.Y is not null && target.Y is not null, "A grid had one dimension; both must have two.");
        Require.Length(values.Length, source.CellCount);
        Require.Length(result.Length, target.CellCount);
        var half = new double[target.Nx * source.Ny];
        for (var j = 0; j < source.Ny; j++)
            AverageLine(values.Slice(j * source.Nx, source.Nx), 1, source.Nx, half.AsSpan(j * target.Nx), 1, target.Nx);
        for (var i = 0; i < target.Nx; i++)
            AverageLine(half.AsSpan(i), target.Nx, source.Ny, result[i..], target.Nx, target.Ny);
    }

    private static void AverageLine(ReadOnlySpan<double> from, int fromStride, int fromCount, Span<double> to, int toStride, int toCount)
    {
        var ratio = (double)fromCount / toCount;
        for (var k = 0; k < toCount; k++)
        {
            var (lower, upper) = (k * ratio, (k + 1) * ratio);
            var sum = 0.0;
            for (var i = (int)lower; i < fromCount && i < upper; i++)
                sum += Math.Max(0, Math.Min(upper, i + 1) - Math.Max(lower, i)) * from[i * fromStride];
            to[k * toStride] = sum / ratio;
        }
    }
}
