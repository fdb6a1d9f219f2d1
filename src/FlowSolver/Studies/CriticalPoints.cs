using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Studies;

/// <summary>What a point where the slope vanishes is.</summary>
public enum CriticalKind
{
    /// <summary>The bottom of a well.</summary>
    Minimum,

    /// <summary>A pass between wells: in one dimension a maximum, in two a point that falls off along one direction and rises along the other.</summary>
    Saddle,

    /// <summary>A hilltop in two dimensions.</summary>
    Maximum,
}

/// <summary>A point of a landscape where the slope vanishes or, at a kink in one dimension, changes sign.</summary>
/// <param name="Kind">Well, pass or hilltop.</param>
/// <param name="X">First coordinate.</param>
/// <param name="Y">Second coordinate; 0 in one dimension.</param>
/// <param name="Potential">V there.</param>
/// <param name="LowCurvature">Smaller eigenvalue of D²V; in one dimension V″. NaN at a kink.</param>
/// <param name="HighCurvature">Larger eigenvalue of D²V; in one dimension the same as the smaller one.</param>
/// <param name="SlopeBefore">At a kink: V′ just below.</param>
/// <param name="SlopeAfter">At a kink: V′ just above.</param>
public sealed record CriticalPoint(
    CriticalKind Kind, double X, double Y, double Potential, double LowCurvature, double HighCurvature, double SlopeBefore = 0, double SlopeAfter = 0)
{
    /// <summary>Whether it is a kink.</summary>
    public bool IsKink => SlopeBefore != 0 || SlopeAfter != 0;

    internal double AxisX { get; init; } = 1;

    internal double AxisY { get; init; }
}

/// <summary>Finds wells, passes and hilltops of a landscape.</summary>
/// <remarks>
/// Seeds are the squares of four neighbouring grid points in which both parts of the slope change sign (intervals in one dimension); from each seed Newton's
/// method on ∇V = 0, held within three cells of the seed. Points nearer to each other than a hundredth of a cell are one. Points where D²V is singular to
/// 1e-9 of its size, such as those of a circular valley, are left out: no rate formula holds there.
/// </remarks>
public static class CriticalPoints
{
    private const int MostCells = 1024;
    private const int MostPoints = 256;

    /// <summary>All critical points inside a domain, wells first, each kind by growing V.</summary>
    /// <param name="potential">V.</param>
    /// <param name="domain">Where to look. Wells at a wall, where the slope does not vanish, are not found.</param>
    /// <param name="cells">Seeds are looked for on this many cells an axis.</param>
    public static IReadOnlyList<CriticalPoint> Find(Potential potential, Domain domain, int cells = 512)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        Require.That(potential.Dimension == domain.Dimension, "The potential and the domain differ in dimension; they must agree.");
        cells = Math.Clamp(cells, 16, MostCells);
        var points = domain.Y is null ? OnLine(potential, domain.X, cells) : OnPlane(potential, domain.X, domain.Y, cells);
        points.Sort((a, b) => a.Kind != b.Kind ? a.Kind.CompareTo(b.Kind) : a.Potential != b.Potential ? a.Potential.CompareTo(b.Potential) : a.X.CompareTo(b.X));
        return points;
    }

    private static List<CriticalPoint> OnLine(Potential potential, Interval interval, int cells)
    {
        var points = new List<CriticalPoint>();
        var kinks = potential.FindKinks(interval);
        foreach (var kink in kinks)
        {
            if (kink.Jump == 0 && kink.SlopeBefore < 0 != kink.SlopeAfter < 0 && kink.SlopeBefore != 0 && kink.SlopeAfter != 0)
            {
                points.Add(new CriticalPoint(kink.SlopeBefore < 0 ? CriticalKind.Minimum : CriticalKind.Saddle, kink.Position, 0,
                    potential.ValueAt(kink.Position), double.NaN, double.NaN, kink.SlopeBefore, kink.SlopeAfter));
            }
        }

        var axis = new Axis(interval, cells);
        // Off the round numbers on which symmetric landscapes have their critical points: a seed is a change of sign, not a zero.
        var from = interval.IsPeriodic() ? 0 : -1;
        var before = double.NaN;
        var position = 0.0;
        for (var i = from; i <= cells; i++)
        {
            var x = i < 0 ? interval.From : i == cells ? interval.To : axis.Center(i) + 1.234e-3 * axis.Width;
            var (_, slope, _) = At(potential, x);
            if (i > from && before * slope <= 0 && before != slope && !HoldsKink(kinks, position, x)
                && Bisected(potential, position, x) is { } root && double.IsFinite(root.Curvature) && root.Curvature != 0)
            {
                points.Add(new CriticalPoint(root.Curvature > 0 ? CriticalKind.Minimum : CriticalKind.Saddle, root.X, 0, root.Value, root.Curvature, root.Curvature));
            }

            (before, position) = (slope, x);
        }

        return Distinct(points, 0.01 * axis.Width, 1, domainX: interval, domainY: null);
    }

    private static bool HoldsKink(IReadOnlyList<Kink> kinks, double from, double to)
    {
        foreach (var kink in kinks)
        {
            if (kink.Position >= from && kink.Position <= to)
                return true;
        }

        return false;
    }

    // Newton where it stays inside the bracket, halving where it does not.
    private static (double X, double Value, double Curvature)? Bisected(Potential potential, double low, double high)
    {
        var atLow = At(potential, low).Slope;
        var x = 0.5 * (low + high);
        for (var k = 0; k < 200; k++)
        {
            var (value, slope, curvature) = At(potential, x);
            if (!double.IsFinite(slope))
                return null;
            if (slope == 0 || high - low <= 4e-16 * Math.Max(Math.Abs(low), Math.Abs(high)))
                return (x, value, curvature);
            if (slope < 0 == atLow < 0)
                low = x;
            else
                high = x;
            var next = x - slope / curvature;
            var moved = next > low && next < high ? next : 0.5 * (low + high);
            if (Math.Abs(moved - x) <= 1e-15 * Math.Max(Math.Abs(x), high - low))
                return (x, value, curvature);
            x = moved;
        }

        var (lastValue, _, lastCurvature) = At(potential, x);
        return (x, lastValue, lastCurvature);
    }

    private static (double Value, double Slope, double Curvature) At(Potential potential, double x)
    {
        Span<double> value = stackalloc double[1], slope = stackalloc double[1], curvature = stackalloc double[1];
        potential.Jet([x], [], new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature });
        return (value[0], slope[0], curvature[0]);
    }

    private static List<CriticalPoint> OnPlane(Potential potential, Interval intervalX, Interval intervalY, int cells)
    {
        var (axisX, axisY) = (new Axis(intervalX, cells), new Axis(intervalY, cells));
        var (countX, countY) = (cells + 1, cells + 1);
        var (slopeX, slopeY) = (new double[countX * countY], new double[countX * countY]);
        var (x, y) = (new double[countX], new double[countX]);
        // Corners of cells, moved a little so that zeros by symmetry fall inside squares; at the ends of the domain its edge.
        for (var j = 0; j < countY; j++)
        {
            for (var i = 0; i < countX; i++)
                x[i] = Seed(axisX, i);
            y.AsSpan().Fill(Seed(axisY, j));
            potential.Gradient(x, y, slopeX.AsSpan(j * countX, countX), slopeY.AsSpan(j * countX, countX));
        }

        var points = new List<CriticalPoint>();
        for (var j = 0; j < cells; j++)
        {
            for (var i = 0; i < cells; i++)
            {
                var at = j * countX + i;
                if (!ChangesSign(slopeX, at, countX) || !ChangesSign(slopeY, at, countX))
                    continue;
                if (Newton(potential, axisX.Center(i), axisY.Center(j), axisX, axisY) is { } found)
                    points.Add(found);
                if (points.Count > 8 * MostPoints)
                    break;
            }
        }

        return Distinct(points, 0.01 * axisX.Width, axisX.Width / axisY.Width, intervalX, intervalY);
    }

    private static double Seed(Axis axis, int corner)
        => corner == 0 || corner == axis.Cells ? axis.Edge(corner) : axis.Edge(corner) + 0.0123 * axis.Width;

    private static bool ChangesSign(double[] values, int at, int stride)
    {
        var (a, b, c, d) = (values[at], values[at + 1], values[at + stride], values[at + stride + 1]);
        return Math.Min(Math.Min(a, b), Math.Min(c, d)) <= 0 && Math.Max(Math.Max(a, b), Math.Max(c, d)) >= 0;
    }

    private static CriticalPoint? Newton(Potential potential, double startX, double startY, Axis axisX, Axis axisY)
    {
        Span<double> value = stackalloc double[1], gx = stackalloc double[1], gy = stackalloc double[1];
        Span<double> xx = stackalloc double[1], xy = stackalloc double[1], yy = stackalloc double[1];
        var (x, y) = (startX, startY);
        for (var k = 0; k < 60; k++)
        {
            potential.Jet([x], [y], new PotentialJet { Value = value, GradientX = gx, GradientY = gy, HessianXX = xx, HessianXY = xy, HessianYY = yy });
            var determinant = xx[0] * yy[0] - xy[0] * xy[0];
            var size = Math.Max(Math.Abs(xx[0]), Math.Max(Math.Abs(yy[0]), Math.Abs(xy[0])));
            if (!double.IsFinite(determinant) || !double.IsFinite(gx[0]) || Math.Abs(determinant) <= 1e-9 * size * size)
                return null;
            var dx = -(yy[0] * gx[0] - xy[0] * gy[0]) / determinant;
            var dy = -(xx[0] * gy[0] - xy[0] * gx[0]) / determinant;
            // Half a cell a step keeps Newton from leaping into another basin.
            var shrink = Math.Min(1, 0.5 / Math.Max(Math.Abs(dx) / axisX.Width, Math.Abs(dy) / axisY.Width));
            if (Math.Abs(dx) <= 1e-13 * axisX.Width && Math.Abs(dy) <= 1e-13 * axisY.Width || k == 59)
                return k == 59 ? null : Classified(x, y, value[0], xx[0], xy[0], yy[0]);
            (x, y) = (x + shrink * dx, y + shrink * dy);
            // One last step below rounding of the coordinates also counts as arrived.
            if (Math.Abs(shrink * dx) <= 4e-16 * Math.Abs(x) && Math.Abs(shrink * dy) <= 4e-16 * Math.Abs(y))
                return Classified(x, y, value[0], xx[0], xy[0], yy[0]);
            if (Math.Abs(x - startX) > 3 * axisX.Width || Math.Abs(y - startY) > 3 * axisY.Width
                || !axisX.Interval.Contains(x) || !axisY.Interval.Contains(y))
            {
                return null;
            }
        }

        return null;
    }

    private static CriticalPoint Classified(double x, double y, double value, double xx, double xy, double yy)
    {
        var middle = 0.5 * (xx + yy);
        var radius = Math.Sqrt(0.25 * (xx - yy) * (xx - yy) + xy * xy);
        var (low, high) = (middle - radius, middle + radius);
        var kind = low > 0 ? CriticalKind.Minimum : high < 0 ? CriticalKind.Maximum : CriticalKind.Saddle;
        // Direction of the smaller curvature.
        var (ax, ay) = xy != 0 ? (xy, low - xx) : xx <= yy ? (1.0, 0.0) : (0.0, 1.0);
        var length = Math.Sqrt(ax * ax + ay * ay);
        return new CriticalPoint(kind, x, y, value, low, high) { AxisX = ax / length, AxisY = ay / length };
    }

    private static List<CriticalPoint> Distinct(List<CriticalPoint> points, double distance, double ratio, Interval domainX, Interval? domainY)
    {
        var distinct = new List<CriticalPoint>();
        foreach (var point in points)
        {
            if (distinct.Count < MostPoints && !distinct.Exists(other =>
                Apart(point.X - other.X, domainX) <= distance && (domainY is null || Apart(point.Y - other.Y, domainY) * ratio <= distance)))
            {
                distinct.Add(point);
            }
        }

        return distinct;
    }

    private static double Apart(double difference, Interval interval)
    {
        difference = Math.Abs(difference);
        return interval.IsPeriodic() ? Math.Min(difference, interval.Length - difference) : difference;
    }

    private static bool IsPeriodic(this Interval interval) => interval.Ends == AxisEnds.Periodic;
}
