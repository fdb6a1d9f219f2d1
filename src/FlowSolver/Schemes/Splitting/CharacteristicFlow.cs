using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// Integrates ẋ = −∇V(x) (or +∇V for a negative time) for many points at once, to about 1e-13 of the domain.
/// </summary>
/// <remarks>
/// Modified midpoint rule with 2, 4, …, 14 substeps extrapolated to order 14, or as far as the last two columns need to agree (W. Gragg, SIAM J. Numer. Anal. 2 (1965) 384-403; E. Hairer,
/// S. Nørsett, G. Wanner, Solving Ordinary Differential Equations I, 2nd ed. 1993, §II.9); the number of equal steps is doubled until they do. On a flow backwards in time, where all but the points
/// that came from inside leave the domain, points become NaN as they leave.
/// </remarks>
internal static class CharacteristicFlow
{
    private const int Columns = 7;
    private const double Tolerance = 2e-14;
    private const int MostSteps = 1 << 12;

    /// <summary>Advances points.</summary>
    /// <param name="potential">V.</param>
    /// <param name="x">First coordinates; at most 512.</param>
    /// <param name="y">Second coordinates; empty in one dimension.</param>
    /// <param name="time">Time times mobility.</param>
    /// <param name="endX">Receives first coordinates.</param>
    /// <param name="endY">Receives second coordinates.</param>
    /// <param name="scale">Length that the tolerance is relative to.</param>
    /// <param name="inside">Reflecting axes that a point may not leave; null to keep all points.</param>
    public static void Advance(
        Potential potential, ReadOnlySpan<double> x, ReadOnlySpan<double> y, double time, Span<double> endX, Span<double> endY, double scale,
        (Interval X, Interval Y)? inside = null)
    {
        var plane = y.Length > 0;
        var count = x.Length;
        Span<double> memory = new double[(plane ? 2 : 1) * count * (Columns + 5)];
        for (var steps = 1; ; steps *= 2)
        {
            x.CopyTo(endX);
            y.CopyTo(endY);
            var good = true;
            for (var s = 0; s < steps && (good || steps >= MostSteps); s++)
                good &= Step(potential, endX, endY, time / steps, scale, inside, memory);
            if (good || steps >= MostSteps)
                return;
        }
    }

    private static bool Step(
        Potential potential, Span<double> x, Span<double> y, double step, double scale, (Interval X, Interval Y)? inside,
        Span<double> memory)
    {
        var count = x.Length;
        var plane = y.Length > 0;
        var size = plane ? 2 * count : count;
        var before = memory[..size];
        var now = memory.Slice(size, size);
        var slope = memory.Slice(2 * size, size);
        var start = memory.Slice(3 * size, size);
        var table = memory.Slice(5 * size, Columns * size);
        x.CopyTo(start);
        y.CopyTo(start[count..]);
        for (var column = 0; column < Columns; column++)
        {
            var parts = 2 * (column + 1);
            var part = step / parts;
            start.CopyTo(before);
            Slopes(potential, before, slope, count, plane);
            for (var i = 0; i < size; i++)
                now[i] = before[i] - part * slope[i];
            for (var k = 1; k < parts; k++)
            {
                Slopes(potential, now, slope, count, plane);
                for (var i = 0; i < size; i++)
                {
                    var next = before[i] - 2 * part * slope[i];
                    before[i] = now[i];
                    now[i] = next;
                }
            }

            Slopes(potential, now, slope, count, plane);
            var row = table.Slice(column * size, size);
            for (var i = 0; i < size; i++)
                row[i] = 0.5 * (before[i] + now[i] - part * slope[i]);
            for (var k = column - 1; k >= 0; k--)
            {
                // Extrapolation in the squared substep; entry k holds the value that began with column k.
                var ratio = (column + 1.0) / (k + 1.0);
                var weight = 1 / (ratio * ratio - 1);
                var lower = table.Slice((k + 1) * size, size);
                var older = table.Slice(k * size, size);
                for (var i = 0; i < size; i++)
                    older[i] = lower[i] + (lower[i] - older[i]) * weight;
            }

            if (column >= 2 && Accept(table[..size], table.Slice(size, size), start, x, y, scale, inside))
                return true;
        }

        return false;
    }

    // Takes over the best column; true when it agrees with the next best wherever that matters.
    private static bool Accept(
        ReadOnlySpan<double> best, ReadOnlySpan<double> next, ReadOnlySpan<double> start, Span<double> x, Span<double> y, double scale,
        (Interval X, Interval Y)? inside)
    {
        var good = true;
        for (var i = 0; i < x.Length; i++)
        {
            var error = Math.Abs(best[i] - next[i]);
            x[i] = best[i];
            if (y.Length > 0)
            {
                error = Math.Max(error, Math.Abs(best[x.Length + i] - next[x.Length + i]));
                y[i] = best[x.Length + i];
                if (inside is { } domain && (!double.IsFinite(start[i]) || Left(domain.X, x[i]) || Left(domain.Y, y[i])))
                {
                    (x[i], y[i]) = (double.NaN, double.NaN);
                    continue;
                }
            }

            good &= error <= Tolerance * (scale + Math.Abs(best[i]));
        }

        return good;

        static bool Left(Interval interval, double position)
            => interval.Ends == AxisEnds.Reflecting && !(position >= interval.From - 1e-12 * interval.Length && position <= interval.To + 1e-12 * interval.Length);
    }

    private static void Slopes(Potential potential, Span<double> at, Span<double> slope, int count, bool plane)
    {
        if (plane)
            potential.Gradient(at[..count], at[count..], slope[..count], slope[count..]);
        else
            potential.Gradient(at, [], slope, []);
    }
}
