using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// Prepares a start for steps that work with log ρ: spreads jumps, and continues log ρ where ρ is 0 or below the range of numbers.
/// </summary>
internal static class PlaneStart
{
    // Densities below this are not trusted to be more than underflow; log of it.
    private const double LeastLog = -640;

    // A second difference of log ρ from cell to cell above this counts as a jump: a normal density of deviation 1.2 cells has 0.7.
    private const double LargestBend = 0.75;

    // Share of the maximum above which cells are looked at for jumps.
    private const double Noticeable = 1e-8;

    // Reach of the spreading kernel in cells: e^(−r²/2) is then at the end of the range of numbers.
    private const int Reach = 34;

    /// <summary>log ρ of the start, flat; finite everywhere.</summary>
    /// <param name="start">The start.</param>
    /// <param name="spread">Whether jumps were found and spread over about two cells, by a normal kernel with a deviation of one cell.</param>
    public static double[] LogDensity(Density start, out bool spread)
    {
        var grid = start.Grid;
        var logs = new double[grid.CellCount];
        Logarithms(start.Values, logs);
        spread = HasJump(start, logs);
        if (spread)
        {
            var values = Spread(start.Values, grid);
            Logarithms(values, logs);
        }

        var known = new bool[logs.Length];
        for (var i = 0; i < logs.Length; i++)
            known[i] = logs[i] > LeastLog;
        var line = Math.Max(grid.Nx, grid.Ny);
        var (copy, flags) = (new double[line], new bool[line]);
        for (var j = 0; j < grid.Ny; j++)
            Continue(logs, known, j * grid.Nx, 1, grid.Nx, grid.X.IsPeriodic, copy, flags);
        for (var i = 0; i < grid.Nx; i++)
            Continue(logs, known, i, grid.Nx, grid.Ny, grid.Y!.IsPeriodic, copy, flags);
        return logs;
    }

    private static void Logarithms(double[] values, double[] logs)
    {
        for (var i = 0; i < values.Length; i++)
            logs[i] = values[i] > 0 ? Math.Max(Math.Log(values[i]), 2 * LeastLog) : 2 * LeastLog;
    }

    private static bool HasJump(Density start, double[] logs)
    {
        var grid = start.Grid;
        var least = Math.Log(SpanKernels.MaxAbs(start.Values) * Noticeable);
        for (var j = 0; j < grid.Ny; j++)
        {
            for (var i = 0; i < grid.Nx; i++)
            {
                var at = j * grid.Nx + i;
                if (logs[at] < least)
                    continue;
                if (Bend(logs, at, i, 1, grid.X) > LargestBend || Bend(logs, at, j, grid.Nx, grid.Y!) > LargestBend)
                    return true;
            }
        }

        return false;
    }

    private static double Bend(double[] logs, int at, int index, int stride, Axis axis)
    {
        if (!axis.IsPeriodic && (index == 0 || index == axis.Cells - 1))
            return 0;
        var before = at + ((index + axis.Cells - 1) % axis.Cells - index) * stride;
        var after = at + ((index + 1) % axis.Cells - index) * stride;
        return Math.Abs(logs[before] - 2 * logs[at] + logs[after]);
    }

    private static double[] Spread(double[] values, Grid grid)
    {
        var kernel = new double[Reach + 1];
        var sum = 0.0;
        for (var k = 0; k <= Reach; k++)
        {
            kernel[k] = Math.Exp(-0.5 * k * k);
            sum += k == 0 ? kernel[k] : 2 * kernel[k];
        }

        SpanKernels.Scale(kernel, 1 / sum);
        var half = new double[values.Length];
        var result = new double[values.Length];
        for (var j = 0; j < grid.Ny; j++)
            SpreadLine(values, half, j * grid.Nx, 1, grid.X, kernel);
        for (var i = 0; i < grid.Nx; i++)
            SpreadLine(half, result, i, grid.Nx, grid.Y!, kernel);
        return result;
    }

    private static void SpreadLine(double[] from, double[] to, int start, int stride, Axis axis, double[] kernel)
    {
        var n = axis.Cells;
        for (var i = 0; i < n; i++)
        {
            var sum = 0.0;
            for (var k = -Reach; k <= Reach; k++)
            {
                var at = i + k;
                if (axis.IsPeriodic)
                    at = (at % n + n) % n;
                else if (at < 0 || at >= n)
                    at = Math.Clamp(at < 0 ? -1 - at : 2 * n - 1 - at, 0, n - 1);
                sum += kernel[Math.Abs(k)] * from[start + at * stride];
            }

            to[start + i * stride] = sum;
        }
    }

    // Continues each known stretch of a line by the parabola through its last three cells (a straight line where that would turn up), the higher
    // one where two meet: exact for normal densities.
    private static void Continue(double[] logs, bool[] known, int start, int stride, int n, bool wraps, double[] copy, bool[] flags)
    {
        var any = false;
        for (var i = 0; i < n; i++)
        {
            copy[i] = logs[start + i * stride];
            flags[i] = known[start + i * stride];
            any |= flags[i];
        }

        if (!any)
            return;
        for (var i = 0; i < n; i++)
        {
            if (flags[i])
                continue;
            var value = Math.Max(From(-1), From(1));
            logs[start + i * stride] = value;
            known[start + i * stride] = true;

            double From(int direction)
            {
                for (var d = 1; d < n; d++)
                {
                    if (!Known(i + direction * d, out var a))
                        continue;
                    var slope = Known(i + direction * (d + 1), out var b) ? a - b : -1;
                    var bend = Known(i + direction * (d + 2), out var c) && Known(i + direction * (d + 1), out _) ? Math.Min(0, a - 2 * b + c) : 0;
                    return a + slope * d + 0.5 * bend * d * (d + 1);
                }

                return double.NegativeInfinity;
            }
        }

        bool Known(int index, out double value)
        {
            if (wraps)
                index = (index % n + n) % n;
            var there = index >= 0 && index < n && flags[index];
            value = there ? copy[index] : 0;
            return there;
        }
    }
}
