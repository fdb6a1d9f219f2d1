using FlowSolver.Grids;

namespace FlowSolver.Schemes.Splitting;

/// <summary>Takes a density to cells an odd number of times finer and back. The centre of a coarse cell is that of its middle fine cell.</summary>
internal static class Refinement
{
    /// <summary>
    /// The density on finer cells: interpolated where it is smooth on the scale of a cell, constant within a coarse cell where it is not.
    /// </summary>
    public static double[] Refine(double[] values, Axis x, Axis? y, int timesX, int timesY)
    {
        var rows = y?.Cells ?? 1;
        var wide = timesX == 1 ? values : new double[values.Length * timesX];
        for (var row = 0; row < rows && timesX > 1; row++)
            RefineLine(values.AsSpan(row * x.Cells, x.Cells), x, timesX, wide.AsSpan(row * x.Cells * timesX, x.Cells * timesX), 1);
        if (y is null || timesY == 1)
            return timesX == 1 ? (double[])values.Clone() : wide;
        var width = x.Cells * timesX;
        var tall = new double[wide.Length * timesY];
        for (var column = 0; column < width; column++)
            RefineLine(wide.AsSpan(column), y, timesY, tall.AsSpan(column), width);
        return tall;
    }

    /// <summary>
    /// The density on coarse cells: values at the centres where these and the averages agree to 1 % of the largest value, as for a start
    /// (<see cref="StartOnGrid"/>), and averages otherwise.
    /// </summary>
    public static void Coarsen(double[] values, int width, int timesX, int timesY, Span<double> destination, int coarseWidth)
    {
        var (largest, difference) = (0.0, 0.0);
        for (var pass = 0; pass < 2; pass++)
        {
            var averages = pass == 0 || difference > 0.0104 * largest;
            for (var cell = 0; cell < destination.Length; cell++)
            {
                var first = cell / coarseWidth * timesY * width + cell % coarseWidth * timesX;
                var center = values[first + timesY / 2 * width + timesX / 2];
                if (!averages)
                {
                    destination[cell] = center;
                    continue;
                }

                var sum = 0.0;
                for (var r = 0; r < timesY; r++)
                {
                    for (var c = 0; c < timesX; c++)
                        sum += values[first + r * width + c];
                }

                destination[cell] = sum / (timesX * timesY);
                largest = Math.Max(largest, destination[cell]);
                difference = Math.Max(difference, Math.Abs(destination[cell] - center));
            }
        }
    }

    private static void RefineLine(ReadOnlySpan<double> line, Axis axis, int times, Span<double> finer, int stride)
    {
        Span<double> stencil = stackalloc double[DensityInterpolation.Points];
        for (var cell = 0; cell < axis.Cells; cell++)
        {
            var smooth = true;
            for (var part = 0; part < times && smooth; part++)
            {
                var place = cell + (part + 0.5) / times - 0.5;
                var first = DensityInterpolation.Locate(place, out var within);
                for (var k = 0; k < stencil.Length; k++)
                    stencil[k] = line[DensityInterpolation.Wrap(first + k, axis.Cells, axis.IsPeriodic) * stride];
                smooth = DensityInterpolation.TryEvaluate(stencil, within, out var value);
                finer[(cell * times + part) * stride] = value;
            }

            for (var part = 0; part < times && !smooth; part++)
                finer[(cell * times + part) * stride] = line[cell * stride];
        }
    }
}
