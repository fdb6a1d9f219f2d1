using System.Runtime.CompilerServices;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// A map x ↦ P(x) of a line or circle into the line, for one step length. Immutable after construction; safe for use from several threads.
/// </summary>
internal abstract class TransportOnLine
{
    protected const int Chunk = 512;

    /// <summary>Points of the domain where P or its slope jumps, in increasing order. Between them P is smooth.</summary>
    public double[] Breakpoints { get; protected set; } = [];

    /// <summary>A sentence for the reader, or null.</summary>
    public string? Warning { get; protected set; }

    /// <summary>Writes P(x) for points of the domain. The images may lie outside it; on a circle they are not wrapped.</summary>
    public abstract void Map(ReadOnlySpan<double> x, Span<double> mapped);

    /// <summary>P at one point.</summary>
    public double At(double x)
    {
        double result = 0;
        Map([x], new Span<double>(ref result));
        return result;
    }

    /// <summary>Builds the map of a kind for a length t (step times mobility).</summary>
    public static TransportOnLine Create(TransportMap kind, Potential potential, Interval interval, double length, int cells) => kind switch
    {
        TransportMap.Gradient => new GradientOnLine(potential, interval, length, cells),
        TransportMap.Proximal => new ProximalOnLine(potential, interval, length, cells),
        _ => new CharacteristicOnLine(potential, interval, length, cells),
    };

    /// <summary>
    /// Points x of the interval where P(x) − value changes sign, up to rounding: preimages, ends of intervals that P sends to the value, and places
    /// where P jumps across it.
    /// </summary>
    protected internal static List<double> FindPreimages(Func<double, double> map, double value, Interval interval, int samples)
    {
        var found = new List<double>();
        var before = interval.From;
        var signBefore = Math.Sign(map(before) - value);
        for (var k = 1; k <= samples; k++)
        {
            var at = k == samples ? interval.To : interval.From + interval.Length * k / samples;
            var sign = Math.Sign(map(at) - value);
            if (sign != signBefore)
                Bisect(before, signBefore, at, sign);
            (before, signBefore) = (at, sign);
        }

        return found;

        void Bisect(double low, int signLow, double high, int signHigh)
        {
            while (true)
            {
                var middle = 0.5 * (low + high);
                if (!(middle > low && middle < high))
                {
                    found.Add(middle);
                    return;
                }

                var sign = Math.Sign(map(middle) - value);
                if (sign == 0 && signLow != 0 && signHigh != 0)
                {
                    // The value may be taken on a whole interval: both of its ends are wanted.
                    Bisect(low, signLow, middle, 0);
                    Bisect(middle, 0, high, signHigh);
                    return;
                }

                if (sign != signLow)
                    (high, signHigh) = (middle, sign);
                else
                    low = middle;
            }
        }
    }

    protected static double[] Sorted(IEnumerable<double> points, Interval interval)
    {
        var kept = new List<double>();
        foreach (var point in points.Order())
        {
            if (point > interval.From && point < interval.To && (kept.Count == 0 || point - kept[^1] > 1e-14 * interval.Length))
                kept.Add(point);
        }

        return [.. kept];
    }
}

/// <summary>x ↦ x − tV′(x).</summary>
internal sealed class GradientOnLine : TransportOnLine
{
    private readonly Potential potential;
    private readonly double length;

    public GradientOnLine(Potential potential, Interval interval, double length, int cells)
    {
        this.potential = potential;
        this.length = length;
        Breakpoints = Sorted(LandscapeOnLine.FindKinks(potential, interval).Select(kink => kink.Position), interval);
        Warning = FoldWarning(interval, cells);
    }

    public override void Map(ReadOnlySpan<double> x, Span<double> mapped)
    {
        potential.Gradient(x, [], mapped, []);
        for (var i = 0; i < mapped.Length; i++)
            mapped[i] = x[i] - length * mapped[i];
    }

    private string? FoldWarning(Interval interval, int cells)
    {
        var count = Math.Max(cells, 256) + 1;
        var x = new double[count];
        for (var i = 0; i < count; i++)
            x[i] = interval.From + interval.Length * i / (count - 1);
        var mapped = new double[count];
        Map(x, mapped);
        var (low, high) = (double.NaN, double.NaN);
        for (var i = 1; i < count; i++)
        {
            if (mapped[i] < mapped[i - 1])
            {
                low = double.IsNaN(low) ? x[i - 1] : low;
                high = x[i];
            }
        }

        return double.IsNaN(low) ? null : FormattableString.Invariant(
            $"The gradient map folds between x = {low:g4} and x = {high:g4}: step times mobility times V″ is above 1 there, or V′ jumps up; the mass that lands on the same place is added up.");
    }
}

/// <summary>x ↦ x(t) of ẋ = −V′(x). A valley with a kink holds whatever reaches it, and so does a wall that V pushes into.</summary>
internal sealed class CharacteristicOnLine : TransportOnLine
{
    private readonly Potential potential;
    private readonly Interval interval;
    private readonly double length;
    private readonly IReadOnlyList<Kink> kinks;

    public CharacteristicOnLine(Potential potential, Interval interval, double length, int cells)
    {
        this.potential = interval.Ends == AxisEnds.Periodic ? new ContinuedPotential(potential, interval, null) : potential;
        this.interval = interval;
        this.length = length;
        kinks = LandscapeOnLine.FindStops(potential, interval);
        if (kinks.Count == 0)
            return;
        var points = new List<double>();
        foreach (var kink in kinks)
        {
            points.Add(kink.Position);
            points.AddRange(FindPreimages(At, kink.Position, interval, Math.Max(cells, 256)));
        }

        Breakpoints = Sorted(points, interval);
    }

    public override void Map(ReadOnlySpan<double> x, Span<double> mapped)
    {
        if (kinks.Count == 0)
        {
            for (var i = 0; i < x.Length; i += Chunk)
            {
                var part = Math.Min(Chunk, x.Length - i);
                CharacteristicFlow.Advance(potential, x.Slice(i, part), [], length, mapped.Slice(i, part), [], interval.Length);
            }

            return;
        }

        for (var i = 0; i < x.Length; i++)
            mapped[i] = AlongPieces(x[i]);
    }

    // Between kinks the flow is smooth and integrated to rounding; the time of arrival at a kink is found by bisection.
    private double AlongPieces(double x)
    {
        var left = length;
        var at = x;
        Span<double> from = stackalloc double[1];
        Span<double> to = stackalloc double[1];
        Span<double> speed = stackalloc double[1];
        for (var pieces = 0; pieces <= 4 * kinks.Count + 4; pieces++)
        {
            var next = 0;
            while (next < kinks.Count && kinks[next].Position < at)
                next++;
            if (next < kinks.Count && kinks[next].Position == at)
            {
                var kink = kinks[next];
                var rightwards = kink.SlopeAfter < 0 && kink.Jump <= 0;
                var leftwards = kink.SlopeBefore > 0 && kink.Jump >= 0;
                if (!rightwards && !leftwards)
                    return at;
                if (rightwards)
                    next++;
            }

            var low = next > 0 ? kinks[next - 1].Position : double.NegativeInfinity;
            var high = next < kinks.Count ? kinks[next].Position : double.PositiveInfinity;
            var piece = new PotentialPiece(potential, low, high);
            var scale = interval.Length;
            from[0] = at;
            CharacteristicFlow.Advance(piece, from, [], left, to, [], scale);
            if (to[0] > low && to[0] < high)
                return to[0];
            var end = to[0] >= high ? high : low;
            if (end == at)
                return at;
            // Newton on the time of arrival: beyond the end the piece goes on with the speed that it has there.
            piece.Gradient([end], [], speed, []);
            var (early, late) = (0.0, left);
            var guess = left + (to[0] - end) / speed[0];
            for (var k = 0; k < 60; k++)
            {
                var middle = guess > early && guess < late ? guess : 0.5 * (early + late);
                if (!(middle > early && middle < late))
                    break;
                CharacteristicFlow.Advance(piece, from, [], middle, to, [], scale);
                if (end > at ? to[0] >= end : to[0] <= end)
                    late = middle;
                else
                    early = middle;
                guess = middle + (to[0] - end) / speed[0];
                if (Math.Abs(guess - middle) <= 1e-15 * length)
                {
                    late = middle;
                    break;
                }
            }

            left -= late;
            at = end;
            if (!(left > 0))
                return at;
        }

        return at;
    }

    /// <summary>V between two kinks, continued beyond them with the slope that it has there.</summary>
    private sealed class PotentialPiece(Potential whole, double low, double high) : Potential
    {
        public override int Dimension => 1;

        public override string Description => whole.Description;

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value) => whole.Value(x, y, value);

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            Span<double> inside = stackalloc double[x.Length];
            for (var i = 0; i < x.Length; i++)
                inside[i] = Math.Min(Math.Max(x[i], Math.BitIncrement(low)), Math.BitDecrement(high));
            whole.Gradient(inside, y, gradientX, gradientY);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target) => whole.Jet(x, y, target);
    }
}

/// <summary>x ↦ the minimiser of (y − x)²/(2t) + V(y); the global one, also where V is not convex.</summary>
/// <remarks>
/// The global minimiser over a fine table of y is the vertex of the lower convex hull of y²/2 + tV(y) at which the slope passes x (C. Lucet, Numer.
/// Algorithms 16 (1997) 171-185, from memory); safeguarded Newton steps between its neighbours give the rest. Kinks of V are vertices
/// of their own, so that everything that lands on one lands on it exactly; so are walls, for y is sought inside them. On a circle V is repeated.
/// </remarks>
internal sealed class ProximalOnLine : TransportOnLine
{
    private readonly Potential potential;
    private readonly double length;
    private readonly double scale;

    // Vertices of the hull, with their neighbours in the table and the slopes of tV there (equal unless the vertex is a kink).
    private readonly double[] vertex;
    private readonly double[] lower;
    private readonly double[] upper;
    private readonly double[] slopeBelow;
    private readonly double[] slopeAbove;
    private readonly double[] switchAt;

    public ProximalOnLine(Potential potential, Interval interval, double length, int cells)
    {
        this.potential = interval.Ends == AxisEnds.Periodic ? new ContinuedPotential(potential, interval, null) : potential;
        this.length = length;
        scale = interval.Length;
        var (y, value, stopOf) = Table(potential, interval, cells);
        var hull = LowerHull(y, value);
        var count = hull.Count;
        vertex = new double[count];
        lower = new double[count];
        upper = new double[count];
        slopeBelow = new double[count];
        slopeAbove = new double[count];
        switchAt = new double[count - 1];
        for (var k = 0; k < count; k++)
        {
            var at = hull[k];
            vertex[k] = y[at];
            lower[k] = y[Math.Max(at - 1, 0)];
            upper[k] = y[Math.Min(at + 1, y.Length - 1)];
            (slopeBelow[k], slopeAbove[k]) = (double.NaN, double.NaN);
            if (stopOf[at] is { } stop)
                (slopeBelow[k], slopeAbove[k]) = stop;
        }

        var points = new List<double>();
        var jumps = 0;
        for (var k = 0; k + 1 < count; k++)
        {
            switchAt[k] = (value[hull[k + 1]] - value[hull[k]]) / (y[hull[k + 1]] - y[hull[k]]);
            if (hull[k + 1] == hull[k] + 1)
                continue;
            if (hull[k + 1] <= hull[k] + 3)
            {
                // A vertex or two lost to rounding, or a jump too short to tell from a steep place.
                (upper[k], lower[k + 1]) = (y[hull[k + 1]], y[hull[k]]);
                continue;
            }

            switchAt[k] = PolishJump(k, switchAt[k]);
            points.Add(switchAt[k]);
            if (switchAt[k] > interval.From && switchAt[k] < interval.To)
                jumps++;
        }

        for (var k = 0; k < y.Length; k++)
        {
            if (stopOf[k] is not { } stop)
                continue;
            if (double.IsFinite(stop.Below))
                points.Add(y[k] + length * stop.Below);
            if (double.IsFinite(stop.Above))
                points.Add(y[k] + length * stop.Above);
        }

        Breakpoints = Sorted(points, interval);
        if (jumps > 0)
        {
            Warning = FormattableString.Invariant(
                $"The proximal map jumps at {jumps} place(s), first at x = {points.Where(p => p > interval.From && p < interval.To).Min():g4}: the step is too long there for a unique minimiser (1 + step times mobility times V″ falls below 0, or V has a concave kink); the global minimiser was taken.");
        }
    }

    [SkipLocalsInit]
    public override void Map(ReadOnlySpan<double> x, Span<double> mapped)
    {
        Span<double> low = stackalloc double[Chunk];
        Span<double> high = stackalloc double[Chunk];
        Span<double> value = stackalloc double[Chunk];
        Span<double> slope = stackalloc double[Chunk];
        Span<double> curvature = stackalloc double[Chunk];
        for (var first = 0; first < x.Length; first += Chunk)
        {
            var part = Math.Min(Chunk, x.Length - first);
            var targets = x.Slice(first, part);
            var y = mapped.Slice(first, part);
            // The vertex at which the slope passes the first point; the next ones are near.
            var k = Math.Max(0, ~Array.BinarySearch(switchAt, targets[0]));
            for (var i = 0; i < part; i++)
                k = Bracket(targets[i], k, ref low[i], ref high[i], ref y[i]);
            for (var iteration = 0; iteration < 100; iteration++)
            {
                potential.Jet(y, [], new PotentialJet { Value = value[..part], GradientX = slope[..part], HessianXX = curvature[..part] });
                var open = 0;
                for (var i = 0; i < part; i++)
                {
                    if (!(low[i] < high[i]))
                        continue;
                    var residual = y[i] - targets[i] + length * slope[i];
                    if (residual > 0)
                        high[i] = y[i];
                    else if (residual < 0)
                        low[i] = y[i];
                    var derivative = 1 + length * curvature[i];
                    var next = y[i] - residual / derivative;
                    if (!(next > low[i] && next < high[i]) || !(derivative > 0) || iteration > 40)
                        next = 0.5 * (low[i] + high[i]);
                    var change = Math.Abs(next - y[i]);
                    y[i] = residual == 0 ? y[i] : next;
                    if (residual == 0 || change <= 2e-16 * (Math.Abs(y[i]) + 1e-3 * scale))
                        low[i] = high[i];
                    else
                        open++;
                }

                if (open == 0)
                    break;
            }
        }
    }

    // Sets bracket and first guess of one point; an empty bracket when the answer is a kink. Returns the vertex, where the next search begins.
    private int Bracket(double x, int hint, ref double low, ref double high, ref double y)
    {
        var k = hint;
        while (k + 1 < vertex.Length && x > switchAt[k])
            k++;
        while (k > 0 && x <= switchAt[k - 1])
            k--;
        y = vertex[k];
        (low, high) = (lower[k], upper[k]);
        if (double.IsNaN(slopeBelow[k]))
            return k;
        if (x < vertex[k] + length * slopeBelow[k])
            high = vertex[k];
        else if (x > vertex[k] + length * slopeAbove[k])
            low = vertex[k];
        else
            (low, high) = (y, y);
        if (low < high)
            y = 0.5 * (low + high);
        return k;
    }

    // At the place of the jump both minima are equally deep. Their depth differs by D(x) with slope (y_low − y_high)/t: Newton on D, each minimum
    // polished within its own bracket.
    private double PolishJump(int k, double x)
    {
        Span<double> low = [lower[k], lower[k + 1]];
        Span<double> high = [upper[k], upper[k + 1]];
        for (var iteration = 0; iteration < 60; iteration++)
        {
            var (left, depthLeft) = LocalMinimum(k, low[0], high[0], x);
            var (right, depthRight) = LocalMinimum(k + 1, low[1], high[1], x);
            var change = length * (depthRight - depthLeft) / (right - left);
            x += change;
            if (Math.Abs(change) <= 1e-15 * scale)
                break;
        }

        return x;
    }

    private (double At, double Depth) LocalMinimum(int k, double low, double high, double x)
    {
        if (!double.IsNaN(slopeBelow[k]) && x >= vertex[k] + length * slopeBelow[k] && x <= vertex[k] + length * slopeAbove[k])
            return (vertex[k], Depth(vertex[k], x));
        var y = vertex[k];
        if (!double.IsNaN(slopeBelow[k]))
            (low, high) = x < vertex[k] + length * slopeBelow[k] ? (low, vertex[k]) : (vertex[k], high);
        double value = 0, slope = 0, curvature = 0;
        for (var iteration = 0; iteration < 100 && low < high; iteration++)
        {
            potential.Jet([y], [], new PotentialJet
            {
                Value = new Span<double>(ref value),
                GradientX = new Span<double>(ref slope),
                HessianXX = new Span<double>(ref curvature),
            });
            var residual = y - x + length * slope;
            if (residual > 0)
                high = y;
            else
                low = y;
            var next = y - residual / (1 + length * curvature);
            if (!(next > low && next < high) || iteration > 40)
                next = 0.5 * (low + high);
            if (residual == 0 || Math.Abs(next - y) <= 1e-16 * scale)
                break;
            y = next;
        }

        return (y, Depth(y, x));
    }

    private double Depth(double y, double x) => (y - x) * (y - x) / (2 * length) + potential.ValueAt(y);

    // Places to search, the objective there less what does not depend on them, and for stops the slopes of V below and above.
    private (double[] Position, double[] Value, (double Below, double Above)?[] StopOf) Table(Potential given, Interval interval, int cells)
    {
        var periodic = interval.Ends == AxisEnds.Periodic;
        var (low, high) = (interval.From, interval.To);
        var count = Math.Max(4 * cells, 4096) + 1;
        if (periodic)
        {
            // Steepest slope found on the table's own spacing, and a margin for what lies between.
            var samples = new double[count];
            for (var i = 0; i < count; i++)
                samples[i] = low + (high - low) * i / (count - 1);
            var slopes = new double[count];
            given.Gradient(samples, [], slopes, []);
            var reach = Math.Min(1.5 * length * slopes.Where(double.IsFinite).Select(Math.Abs).DefaultIfEmpty(0).Max() + 8 * interval.Length / count, 2 * interval.Length);
            (low, high) = (low - reach, high + reach);
        }

        var places = new List<(double Position, (double Below, double Above)? Stop)>(count + 8);
        for (var i = 0; i < count; i++)
            places.Add((low + (high - low) * i / (count - 1), null));
        if (!periodic)
        {
            var (below, above) = LandscapeOnLine.WallSlopes(given, interval);
            places[0] = (low, (double.NegativeInfinity, double.IsFinite(below) ? below : double.NegativeInfinity));
            places[count - 1] = places[count - 1] with { Stop = (double.IsFinite(above) ? above : double.PositiveInfinity, double.PositiveInfinity) };
        }

        foreach (var kink in periodic ? LandscapeOnLine.FindStops(given, interval) : LandscapeOnLine.FindKinks(given, interval))
        {
            if (kink.Position < low || kink.Position > high)
                continue;
            places.RemoveAll(place => place.Stop is null && Math.Abs(place.Position - kink.Position) < 1e-3 * (high - low) / count);
            if (kink.Jump == 0)
            {
                places.Add((kink.Position, (kink.SlopeBefore, kink.SlopeAfter)));
                continue;
            }

            // Just below an upward jump the way up is barred, and so on.
            places.Add((Math.BitDecrement(kink.Position), (kink.SlopeBefore, kink.Jump > 0 ? double.PositiveInfinity : kink.SlopeBefore)));
            places.Add((Math.BitIncrement(kink.Position), (kink.Jump < 0 ? double.NegativeInfinity : kink.SlopeAfter, kink.SlopeAfter)));
        }

        places.Sort((a, b) => a.Position.CompareTo(b.Position));
        var y = places.Select(place => place.Position).ToArray();
        var value = new double[y.Length];
        potential.Value(y, [], value);
        var kept = Enumerable.Range(0, y.Length).Where(i => double.IsFinite(value[i])).ToArray();
        return ([.. kept.Select(i => y[i])], [.. kept.Select(i => 0.5 * y[i] * y[i] + length * value[i])], [.. kept.Select(i => places[i].Stop)]);
    }

    private static List<int> LowerHull(double[] y, double[] value)
    {
        var hull = new List<int>();
        for (var i = 0; i < y.Length; i++)
        {
            while (hull.Count >= 2)
            {
                var (a, b) = (hull[^2], hull[^1]);
                if ((value[b] - value[a]) * (y[i] - y[b]) < (value[i] - value[b]) * (y[b] - y[a]))
                    break;
                hull.RemoveAt(hull.Count - 1);
            }

            hull.Add(i);
        }

        return hull;
    }
}
