using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>A plane landscape along one axis, the other coordinate held: a landscape on a line.</summary>
internal sealed class PotentialSlice(Potential plane, bool alongX, double held) : Potential
{
    private const int Chunk = 256;

    public override int Dimension => 1;

    public override string Description => plane.Description;

    public override bool IsSmooth => plane.IsSmooth;

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        Span<double> other = stackalloc double[Chunk];
        other.Fill(held);
        for (var i = 0; i < x.Length; i += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - i);
            if (alongX)
                plane.Value(x.Slice(i, part), other[..part], value.Slice(i, part));
            else
                plane.Value(other[..part], x.Slice(i, part), value.Slice(i, part));
        }
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        Span<double> other = stackalloc double[Chunk];
        Span<double> unused = stackalloc double[Chunk];
        other.Fill(held);
        for (var i = 0; i < x.Length; i += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - i);
            if (alongX)
                plane.Gradient(x.Slice(i, part), other[..part], gradientX.Slice(i, part), unused[..part]);
            else
                plane.Gradient(other[..part], x.Slice(i, part), unused[..part], gradientX.Slice(i, part));
        }
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        Span<double> other = stackalloc double[Chunk];
        Span<double> unused = stackalloc double[Chunk];
        Span<double> mixed = stackalloc double[Chunk];
        Span<double> across = stackalloc double[Chunk];
        other.Fill(held);
        for (var i = 0; i < x.Length; i += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - i);
            var value = target.Value.Slice(i, part);
            var slope = target.GradientX.Slice(i, part);
            var curvature = target.HessianXX.Slice(i, part);
            if (alongX)
            {
                plane.Jet(x.Slice(i, part), other[..part], new PotentialJet
                {
                    Value = value,
                    GradientX = slope,
                    GradientY = unused[..part],
                    HessianXX = curvature,
                    HessianXY = mixed[..part],
                    HessianYY = across[..part],
                });
            }
            else
            {
                plane.Jet(other[..part], x.Slice(i, part), new PotentialJet
                {
                    Value = value,
                    GradientX = unused[..part],
                    GradientY = slope,
                    HessianXX = across[..part],
                    HessianXY = mixed[..part],
                    HessianYY = curvature,
                });
            }
        }
    }

    /// <summary>
    /// Kinks found by sampling: an interval over which V′ changes by more than its curvature explains is halved until the jump stands alone.
    /// </summary>
    public override IReadOnlyList<Kink> FindKinks(Interval interval)
    {
        ArgumentNullException.ThrowIfNull(interval);
        const int samples = 4096;
        if (IsSmooth)
            return [];
        var x = new double[samples + 1];
        for (var i = 0; i <= samples; i++)
            x[i] = interval.From + interval.Length * i / samples;
        var (value, slope, curvature) = (new double[x.Length], new double[x.Length], new double[x.Length]);
        Jet(x, [], new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature });
        var steepest = SpanKernels.MaxAbs(slope);
        var kinks = new List<Kink>();
        for (var i = 0; i < samples; i++)
        {
            // A sample exactly on a kink has the slope of one side, so that one of its two intervals always shows the jump.
            if (Math.Abs(Excess(x[i], x[i + 1])) > 1e-4 * steepest && Isolate(x[i], x[i + 1]) is { } kink)
                kinks.Add(kink);
        }

        return kinks;

        double Excess(double low, double high)
        {
            Span<double> v = stackalloc double[2];
            Span<double> s = stackalloc double[2];
            Span<double> c = stackalloc double[2];
            Jet([low, high], [], new PotentialJet { Value = v, GradientX = s, HessianXX = c });
            return s[1] - s[0] - 0.5 * (high - low) * (c[0] + c[1]);
        }

        Kink? Isolate(double low, double high)
        {
            while (0.5 * (low + high) is var middle && middle > low && middle < high)
            {
                if (Math.Abs(Excess(low, middle)) > Math.Abs(Excess(middle, high)))
                    high = middle;
                else
                    low = middle;
            }

            // The two points left are neighbours in floating point; the kink is the rounder of the two.
            Span<double> s = stackalloc double[2];
            var margin = 1e-9 * interval.Length;
            Gradient([low - margin, high + margin], [], s, []);
            if (Math.Abs(s[1] - s[0]) <= 1e-5 * steepest)
                return null;
            var position = Math.Abs(low) < Math.Abs(high) ? low : high;
            var rounded = Math.Round(position, 12);
            if (Math.Abs(rounded - position) <= 2e-15 * Math.Max(1, Math.Abs(position)))
                position = rounded;
            return new Kink(position, s[0], s[1], 0);
        }
    }
}

/// <summary>
/// A landscape beyond its domain: repeated on circles; across walls it goes on with the slope that it has there, so that what is pushed into a wall stays at it once its place is cut off
/// at the wall.
/// </summary>
internal sealed class ContinuedPotential(Potential inner, Interval intervalX, Interval? intervalY) : Potential
{
    private const int Chunk = 256;

    public override int Dimension => inner.Dimension;

    public override string Description => inner.Description;

    public override bool IsSmooth => inner.IsSmooth;

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        Span<double> atX = stackalloc double[Chunk];
        Span<double> atY = stackalloc double[Chunk];
        for (var i = 0; i < x.Length; i += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - i);
            inner.Value(Bring(intervalX, x.Slice(i, part), atX), y.Length == 0 ? [] : Bring(intervalY!, y.Slice(i, part), atY), value.Slice(i, part));
        }
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        Span<double> atX = stackalloc double[Chunk];
        Span<double> atY = stackalloc double[Chunk];
        for (var i = 0; i < x.Length; i += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - i);
            if (y.Length == 0)
                inner.Gradient(Bring(intervalX, x.Slice(i, part), atX), [], gradientX.Slice(i, part), []);
            else
                inner.Gradient(Bring(intervalX, x.Slice(i, part), atX), Bring(intervalY!, y.Slice(i, part), atY), gradientX.Slice(i, part), gradientY.Slice(i, part));
        }
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        Span<double> atX = stackalloc double[Chunk];
        Span<double> atY = stackalloc double[Chunk];
        for (var i = 0; i < x.Length; i += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - i);
            var line = y.Length == 0;
            inner.Jet(Bring(intervalX, x.Slice(i, part), atX), line ? [] : Bring(intervalY!, y.Slice(i, part), atY), new PotentialJet
            {
                Value = target.Value.Slice(i, part),
                GradientX = target.GradientX.Slice(i, part),
                GradientY = line ? [] : target.GradientY.Slice(i, part),
                HessianXX = target.HessianXX.Slice(i, part),
                HessianXY = line ? [] : target.HessianXY.Slice(i, part),
                HessianYY = line ? [] : target.HessianYY.Slice(i, part),
            });
        }
    }

    private static Span<double> Bring(Interval interval, ReadOnlySpan<double> positions, Span<double> places)
    {
        for (var i = 0; i < positions.Length; i++)
            places[i] = interval.Ends == AxisEnds.Periodic ? interval.Fold(positions[i]) : Math.Clamp(positions[i], interval.From, interval.To);
        return places[..positions.Length];
    }
}

/// <summary>What the maps need to know about a landscape.</summary>
internal static class LandscapeOnLine
{
    /// <summary>
    /// Kinks and jumps strictly inside an interval; on a circle also the seam, where a formula that is not periodic has a kink that it does not know of.
    /// </summary>
    public static IReadOnlyList<Kink> FindKinks(Potential potential, Interval interval)
    {
        var kinks = potential.FindKinks(interval)
            .Where(kink => kink.Position > interval.From && kink.Position < interval.To && (kink.SlopeBefore != kink.SlopeAfter || kink.Jump != 0)).ToList();
        if (interval.Ends != AxisEnds.Periodic)
            return kinks;
        Span<double> slope = stackalloc double[2];
        potential.Gradient([interval.To, interval.From], [], slope, []);
        var step = potential.ValueAt(interval.From) - potential.ValueAt(interval.To);
        if (Math.Abs(step) <= 1e-9 * (1 + Math.Abs(potential.ValueAt(interval.From))))
            step = 0;
        if (step != 0 || Math.Abs(slope[0] - slope[1]) > 1e-9 * (1 + Math.Abs(slope[0]) + Math.Abs(slope[1])))
            kinks.Insert(0, new Kink(interval.From, slope[0], slope[1], step));
        return kinks;
    }

    /// <summary>The same, with what a walker can meet beyond one turn of a circle, and with walls that V pushes into: nothing goes beyond them.</summary>
    public static IReadOnlyList<Kink> FindStops(Potential potential, Interval interval)
    {
        var kinks = FindKinks(potential, interval);
        if (interval.Ends == AxisEnds.Periodic)
            return [.. Enumerable.Range(-2, 5).SelectMany(turn => kinks.Select(kink => kink with { Position = kink.Position + turn * interval.Length }))];
        var (below, above) = WallSlopes(potential, interval);
        var stops = new List<Kink>(kinks);
        if (below > 0)
            stops.Insert(0, new Kink(interval.From, double.NegativeInfinity, below, 0));
        if (above < 0)
            stops.Add(new Kink(interval.To, above, double.PositiveInfinity, 0));
        return stops;
    }

    /// <summary>V′ at the two walls.</summary>
    public static (double From, double To) WallSlopes(Potential potential, Interval interval)
    {
        Span<double> slope = stackalloc double[2];
        potential.Gradient([interval.From, interval.To], [], slope, []);
        return (slope[0], slope[1]);
    }

    /// <summary>
    /// Splits V(x, y) = A(x) + B(y) where it has that form (tested at scattered points to rounding); null otherwise. The slices are V with one coordinate held, so that
    /// their derivatives are A′ and B′.
    /// </summary>
    public static (Potential AlongX, Potential AlongY)? Separate(Potential plane, Interval x, Interval y)
    {
        const int points = 24;
        var (heldX, heldY) = (x.From + 0.4142135623730951 * x.Length, y.From + 0.4142135623730951 * y.Length);
        var corner = plane.ValueAt(heldX, heldY);
        for (var k = 1; k <= points; k++)
        {
            // Fractional parts of multiples of two irrational numbers: scattered, and the same in every run.
            var px = x.From + x.Length * (0.7548776662466927 * k % 1);
            var py = y.From + y.Length * (0.5698402909980532 * k % 1);
            var (whole, left, right) = (plane.ValueAt(px, py), plane.ValueAt(px, heldY), plane.ValueAt(heldX, py));
            var size = Math.Abs(whole) + Math.Abs(left) + Math.Abs(right) + Math.Abs(corner);
            if (!(Math.Abs(whole + corner - left - right) <= 1e-13 * size))
                return null;
        }

        return (new PotentialSlice(plane, true, heldY), new PotentialSlice(plane, false, heldX));
    }
}
