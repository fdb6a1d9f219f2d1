namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// Values of a density between cell centres: a polynomial of degree 7 through the logarithms of eight neighbours, which is exact for normal densities,
/// positive, and right relative to the density itself; a straight line through the two nearest values where the density has zeros or is too rough for that.
/// </summary>
internal static class DensityInterpolation
{
    /// <summary>Neighbours used.</summary>
    public const int Points = 8;

    // 1/Π_{j≠k}(k − j) for nodes 0 … 7 and for nodes 2 … 5.
    private static readonly double[] Barycentric =
        [-1.0 / 5040, 1.0 / 720, -1.0 / 240, 1.0 / 144, -1.0 / 144, 1.0 / 240, -1.0 / 720, 1.0 / 5040];

    // Logarithms that the two polynomials disagree on by more than this are not those of a smooth density.
    private const double RoughFrom = 0.2;

    /// <summary>Finds the stencil of a place, measured in cells from the centre of cell 0, and the place within it.</summary>
    /// <returns>Index of the first neighbour, which may lie outside the grid.</returns>
    public static int Locate(double place, out double within)
    {
        var first = (int)Math.Floor(place) - 3;
        within = place - first;
        return first;
    }

    /// <summary>Index of a cell of the continued grid: mirrored at walls, wrapped on a circle.</summary>
    public static int Wrap(int cell, int count, bool periodic)
    {
        if ((uint)cell < (uint)count)
            return cell;
        var period = periodic ? count : 2 * count;
        cell = (cell % period + period) % period;
        return cell < count ? cell : period - 1 - cell;
    }

    /// <summary>Weights of the polynomial through eight neighbours at <paramref name="within"/> ∈ [3, 4].</summary>
    public static void Weights(double within, Span<double> weights)
    {
        for (var k = 0; k < Points; k++)
        {
            var product = Barycentric[k];
            for (var j = 0; j < Points; j++)
            {
                if (j != k)
                    product *= within - j;
            }

            weights[k] = product;
        }
    }

    /// <summary>The density at a place of the stencil.</summary>
    /// <param name="values">Eight densities.</param>
    /// <param name="within">Place within the stencil, between 3 and 4.</param>
    public static double Evaluate(ReadOnlySpan<double> values, double within)
        => TryEvaluate(values, within, out var value) ? value : values[3] + (within - 3) * (values[4] - values[3]);

    /// <summary>The density at a place of the stencil by the polynomial alone; false where the density is too rough for it.</summary>
    public static bool TryEvaluate(ReadOnlySpan<double> values, double within, out double value)
    {
        value = 0;
        for (var k = 0; k < Points; k++)
        {
            if (!(values[k] > 1e-290))
                return false;
        }

        Span<double> weights = stackalloc double[Points];
        Span<double> logs = stackalloc double[Points];
        Weights(within, weights);
        var log = 0.0;
        for (var k = 0; k < Points; k++)
        {
            logs[k] = Math.Log(values[k]);
            log += weights[k] * logs[k];
        }

        var t = within - 3;
        var cubic = logs[2] * (-t * (t - 1) * (t - 2) / 6) + logs[3] * ((t + 1) * (t - 1) * (t - 2) / 2)
            + logs[4] * (-(t + 1) * t * (t - 2) / 2) + logs[5] * ((t + 1) * t * (t - 1) / 6);
        value = Math.Exp(log);
        return Math.Abs(log - cubic) < RoughFrom;
    }

    /// <summary>The density at a place on a line of cells.</summary>
    /// <param name="line">Densities, <paramref name="stride"/> apart.</param>
    /// <param name="count">Number of cells.</param>
    /// <param name="stride">Distance between neighbours in <paramref name="line"/>.</param>
    /// <param name="periodic">Circle or walls.</param>
    /// <param name="place">Cells from the centre of cell 0.</param>
    public static double Evaluate(ReadOnlySpan<double> line, int count, int stride, bool periodic, double place)
    {
        var first = Locate(place, out var within);
        Span<double> values = stackalloc double[Points];
        for (var k = 0; k < Points; k++)
            values[k] = line[Wrap(first + k, count, periodic) * stride];
        return Evaluate(values, within);
    }
}
