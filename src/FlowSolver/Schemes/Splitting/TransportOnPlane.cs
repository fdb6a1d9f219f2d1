using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>A map of the plane for one step length, of a landscape without kinks along lines. Immutable; safe for use from several threads.</summary>
internal abstract class TransportOnPlane
{
    /// <summary>Most points in one call.</summary>
    public const int Chunk = 512;

    /// <summary>V.</summary>
    protected Potential Landscape { get; }

    /// <summary>t, step times mobility.</summary>
    protected double Length { get; }

    /// <summary>Length that tolerances are relative to.</summary>
    protected double Scale { get; }

    /// <summary>First axis.</summary>
    protected Interval X { get; }

    /// <summary>Second axis.</summary>
    protected Interval Y { get; }

    protected TransportOnPlane(Potential landscape, double length, Interval x, Interval y)
    {
        Landscape = new ContinuedPotential(landscape, x, y);
        Length = length;
        (X, Y) = (x, y);
        Scale = Math.Max(x.Length, y.Length);
    }

    /// <summary>Builds the map of a kind.</summary>
    public static TransportOnPlane Create(TransportMap kind, Potential potential, double length, Interval x, Interval y) => kind switch
    {
        TransportMap.Gradient => new GradientOnPlane(potential, length, x, y),
        TransportMap.Proximal => new ProximalOnPlane(potential, length, x, y),
        _ => new CharacteristicOnPlane(potential, length, x, y),
    };

    /// <summary>Writes the images.</summary>
    public abstract void Map(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> mappedX, Span<double> mappedY);

    /// <summary>
    /// Writes the points that are mapped to the given ones and multiplies the volume ratio det D(P⁻¹) into <paramref name="volume"/>; NaN points and
    /// ratio 0 where there is none or none that is unique.
    /// </summary>
    public abstract void MapBack(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> originX, Span<double> originY, Span<double> volume);

    /// <summary>Whether the map is one-to-one near a point, from the second derivatives there.</summary>
    public abstract bool IsOneToOne(double hessianXX, double hessianXY, double hessianYY);

    /// <summary>What to tell the reader when the map is not one-to-one around a place.</summary>
    public abstract string Describe(double x, double y);

    protected void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Jets jets)
        => Landscape.Jet(x, y, new PotentialJet
        {
            Value = jets.Value.AsSpan(0, x.Length),
            GradientX = jets.GradientX.AsSpan(0, x.Length),
            GradientY = jets.GradientY.AsSpan(0, x.Length),
            HessianXX = jets.HessianXX.AsSpan(0, x.Length),
            HessianXY = jets.HessianXY.AsSpan(0, x.Length),
            HessianYY = jets.HessianYY.AsSpan(0, x.Length),
        });

    protected sealed class Jets
    {
        public double[] Value { get; } = new double[Chunk];

        public double[] GradientX { get; } = new double[Chunk];

        public double[] GradientY { get; } = new double[Chunk];

        public double[] HessianXX { get; } = new double[Chunk];

        public double[] HessianXY { get; } = new double[Chunk];

        public double[] HessianYY { get; } = new double[Chunk];
    }
}

/// <summary>x ↦ x − t∇V(x).</summary>
internal sealed class GradientOnPlane(Potential landscape, double length, Interval x, Interval y) : TransportOnPlane(landscape, length, x, y)
{
    public override void Map(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> mappedX, Span<double> mappedY)
    {
        Landscape.Gradient(x, y, mappedX, mappedY);
        for (var i = 0; i < x.Length; i++)
        {
            mappedX[i] = x[i] - Length * mappedX[i];
            mappedY[i] = y[i] - Length * mappedY[i];
        }
    }

    // Newton on z − t∇V(z) = x from z = x + t∇V(x).
    public override void MapBack(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> originX, Span<double> originY, Span<double> volume)
    {
        var jets = new Jets();
        Landscape.Gradient(x, y, originX, originY);
        for (var i = 0; i < x.Length; i++)
        {
            originX[i] = x[i] + Length * originX[i];
            originY[i] = y[i] + Length * originY[i];
        }

        for (var iteration = 0; iteration < 40; iteration++)
        {
            Jet(originX, originY, jets);
            var largest = 0.0;
            for (var i = 0; i < x.Length; i++)
            {
                var (xx, xy, yy) = (1 - Length * jets.HessianXX[i], -Length * jets.HessianXY[i], 1 - Length * jets.HessianYY[i]);
                var determinant = xx * yy - xy * xy;
                var residualX = originX[i] - Length * jets.GradientX[i] - x[i];
                var residualY = originY[i] - Length * jets.GradientY[i] - y[i];
                var changeX = (yy * residualX - xy * residualY) / determinant;
                var changeY = (xx * residualY - xy * residualX) / determinant;
                originX[i] -= changeX;
                originY[i] -= changeY;
                var change = Math.Max(Math.Abs(changeX), Math.Abs(changeY));
                if (double.IsFinite(change))
                    largest = Math.Max(largest, change);
            }

            if (largest <= 1e-15 * Scale)
                break;
        }

        Jet(originX, originY, jets);
        for (var i = 0; i < x.Length; i++)
        {
            var (xx, xy, yy) = (1 - Length * jets.HessianXX[i], -Length * jets.HessianXY[i], 1 - Length * jets.HessianYY[i]);
            var residual = Math.Abs(originX[i] - Length * jets.GradientX[i] - x[i]) + Math.Abs(originY[i] - Length * jets.GradientY[i] - y[i]);
            var determinant = xx * yy - xy * xy;
            if (residual <= 1e-10 * Scale && xx > 0 && determinant > 0)
                volume[i] /= determinant;
            else
                (originX[i], originY[i], volume[i]) = (double.NaN, double.NaN, 0);
        }
    }

    public override bool IsOneToOne(double hessianXX, double hessianXY, double hessianYY)
    {
        var (xx, xy, yy) = (1 - Length * hessianXX, Length * hessianXY, 1 - Length * hessianYY);
        return xx > 0 && xx * yy - xy * xy > 0;
    }

    public override string Describe(double x, double y) => FormattableString.Invariant(
        $"The gradient map folds, for instance at x = {x:g4}, y = {y:g4}: step times mobility times the largest curvature of V is above 1 there; the mass that lands on the same place is added up.");
}

/// <summary>
/// x ↦ the minimiser of |z − x|²/(2t) + V(z) over the domain that Newton's descent from x finds: the only one where I + tD²V is positive definite. A coordinate at a wall that the
/// objective falls towards is held there.
/// </summary>
internal sealed class ProximalOnPlane(Potential landscape, double length, Interval x, Interval y) : TransportOnPlane(landscape, length, x, y)
{
    public override void Map(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> mappedX, Span<double> mappedY)
    {
        var jets = new Jets();
        var best = new double[x.Length];
        var (oldX, oldY) = (new double[x.Length], new double[x.Length]);
        var (stepX, stepY) = (new double[x.Length], new double[x.Length]);
        var share = new double[x.Length];
        var done = new bool[x.Length];
        var (lowX, highX) = Bounds(X);
        var (lowY, highY) = Bounds(Y);
        x.CopyTo(mappedX);
        y.CopyTo(mappedY);
        share.AsSpan().Fill(1);
        Span<double> slopeAlong = new double[x.Length];
        best.AsSpan().Fill(double.PositiveInfinity);
        // Damped Newton descent for all points side by side: a step that does not lower the objective enough is halved and tried again.
        for (var iteration = 0; iteration < 200; iteration++)
        {
            Jet(mappedX, mappedY, jets);
            var open = false;
            for (var i = 0; i < x.Length; i++)
            {
                if (done[i])
                    continue;
                var (dx, dy) = (mappedX[i] - x[i], mappedY[i] - y[i]);
                var objective = 0.5 * (dx * dx + dy * dy) + Length * jets.Value[i];
                var gx = dx + Length * jets.GradientX[i];
                var gy = dy + Length * jets.GradientY[i];
                // A coordinate that the objective pushes into its wall is out of the reckoning.
                var heldX = (mappedX[i] <= lowX && gx > 0) || (mappedX[i] >= highX && gx < 0);
                var heldY = (mappedY[i] <= lowY && gy > 0) || (mappedY[i] >= highY && gy < 0);
                var rounding = 1e-15 * (Math.Abs(objective) + Scale * Scale);
                if (!(objective <= best[i] + 1e-4 * share[i] * slopeAlong[i] + rounding) || !double.IsFinite(gx) || !double.IsFinite(gy))
                {
                    share[i] *= 0.5;
                    if (share[i] < 1e-12)
                    {
                        (mappedX[i], mappedY[i]) = AtKink(x[i], y[i], oldX[i], oldY[i]);
                        done[i] = true;
                        continue;
                    }

                    (mappedX[i], mappedY[i]) = (Math.Clamp(oldX[i] + share[i] * stepX[i], lowX, highX), Math.Clamp(oldY[i] + share[i] * stepY[i], lowY, highY));
                    open = true;
                    continue;
                }

                (gx, gy) = (heldX ? 0 : gx, heldY ? 0 : gy);
                if (Math.Abs(gx) + Math.Abs(gy) <= 1e-15 * Scale)
                {
                    done[i] = true;
                    continue;
                }

                var (xx, xy, yy) = (1 + Length * jets.HessianXX[i], heldX || heldY ? 0 : Length * jets.HessianXY[i], 1 + Length * jets.HessianYY[i]);
                // Where the objective is not convex its curvature is raised until it is.
                var lowest = 0.5 * (xx + yy) - Math.Sqrt(0.25 * (xx - yy) * (xx - yy) + xy * xy);
                if (!(lowest > 1e-3))
                {
                    xx += 1e-3 + 2 * Math.Abs(lowest);
                    yy += 1e-3 + 2 * Math.Abs(lowest);
                }

                var determinant = xx * yy - xy * xy;
                (stepX[i], stepY[i]) = (-(yy * gx - xy * gy) / determinant, -(xx * gy - xy * gx) / determinant);
                (oldX[i], oldY[i], best[i], share[i]) = (mappedX[i], mappedY[i], objective, 1);
                (mappedX[i], mappedY[i]) = (Math.Clamp(oldX[i] + stepX[i], lowX, highX), Math.Clamp(oldY[i] + stepY[i], lowY, highY));
                (stepX[i], stepY[i]) = (mappedX[i] - oldX[i], mappedY[i] - oldY[i]);
                slopeAlong[i] = gx * stepX[i] + gy * stepY[i];
                if (Math.Abs(stepX[i]) + Math.Abs(stepY[i]) <= 1e-15 * Scale)
                    done[i] = true;
                else
                    open = true;
            }

            if (!open)
                return;
        }

        for (var i = 0; i < x.Length; i++)
        {
            if (!done[i])
                (mappedX[i], mappedY[i]) = AtKink(x[i], y[i], oldX[i], oldY[i]);
        }
    }

    private static (double Low, double High) Bounds(Interval interval)
        => interval.Ends == AxisEnds.Periodic ? (double.NegativeInfinity, double.PositiveInfinity) : (interval.From, interval.To);

    // Newton stops short at a point where V has no derivative; a search along shrinking crosses does not need one.
    private (double X, double Y) AtKink(double x, double y, double fromX, double fromY)
    {
        var best = Depth(fromX, fromY);
        var reach = 0.05 * Scale;
        while (reach > 1e-13 * Scale)
        {
            var improved = false;
            foreach (var (dx, dy) in ((double, double)[])[(reach, 0), (-reach, 0), (0, reach), (0, -reach)])
            {
                var depth = Depth(fromX + dx, fromY + dy);
                if (!(depth < best))
                    continue;
                (best, fromX, fromY, improved) = (depth, fromX + dx, fromY + dy, true);
                break;
            }

            if (!improved)
                reach *= 0.5;
        }

        return (fromX, fromY);

        double Depth(double a, double b) => 0.5 * ((a - x) * (a - x) + (b - y) * (b - y)) + Length * Landscape.ValueAt(a, b);
    }

    public override void MapBack(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> originX, Span<double> originY, Span<double> volume)
    {
        var jets = new Jets();
        Jet(x, y, jets);
        for (var i = 0; i < x.Length; i++)
        {
            originX[i] = x[i] + Length * jets.GradientX[i];
            originY[i] = y[i] + Length * jets.GradientY[i];
            var (xx, xy, yy) = (1 + Length * jets.HessianXX[i], Length * jets.HessianXY[i], 1 + Length * jets.HessianYY[i]);
            var determinant = xx * yy - xy * xy;
            if (xx > 0 && determinant > 0)
                volume[i] *= determinant;
            else
                (originX[i], originY[i], volume[i]) = (double.NaN, double.NaN, 0);
        }
    }

    public override bool IsOneToOne(double hessianXX, double hessianXY, double hessianYY)
    {
        var (xx, xy, yy) = (1 + Length * hessianXX, Length * hessianXY, 1 + Length * hessianYY);
        return xx > 0 && xx * yy - xy * xy > 0;
    }

    public override string Describe(double x, double y) => FormattableString.Invariant(
        $"The proximal map is not unique around x = {x:g4}, y = {y:g4}: 1 + step times mobility times the least curvature of V is below 0 there; the minimiser downhill of each point was taken.");
}

/// <summary>x ↦ x(t) of ẋ = −∇V(x). A wall that V pushes into holds what reaches it, while it may slide along.</summary>
internal sealed class CharacteristicOnPlane(Potential landscape, double length, Interval x, Interval y) : TransportOnPlane(landscape, length, x, y)
{
    private static readonly (double At, double Weight)[] TimeRule = Rule();

    public override void Map(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> mappedX, Span<double> mappedY)
    {
        CharacteristicFlow.Advance(Landscape, x, y, Length, mappedX, mappedY, Scale);
        for (var i = 0; i < x.Length; i++)
        {
            if (X.Ends == AxisEnds.Reflecting)
                mappedX[i] = Math.Clamp(mappedX[i], X.From, X.To);
            if (Y.Ends == AxisEnds.Reflecting)
                mappedY[i] = Math.Clamp(mappedY[i], Y.From, Y.To);
        }
    }

    // The volume ratio of the flow backwards in time is the exponential of ∫ ΔV along the path (Liouville).
    public override void MapBack(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> originX, Span<double> originY, Span<double> volume)
    {
        var jets = new Jets();
        Jet(x, y, jets);
        var stiffest = 0.0;
        for (var i = 0; i < x.Length; i++)
            stiffest = Math.Max(stiffest, Math.Abs(jets.HessianXX[i]) + Math.Abs(jets.HessianYY[i]));
        var parts = (int)Math.Clamp(Math.Ceiling(0.5 * Length * stiffest), 1, 4);
        x.CopyTo(originX);
        y.CopyTo(originY);
        var (nextX, nextY) = (new double[x.Length], new double[x.Length]);
        var grown = new double[x.Length];
        for (var part = 0; part < parts; part++)
        {
            var before = 0.0;
            for (var k = 0; k <= TimeRule.Length; k++)
            {
                var at = k < TimeRule.Length ? TimeRule[k].At : 1;
                CharacteristicFlow.Advance(Landscape, originX, originY, -(at - before) * Length / parts, nextX, nextY, Scale, (X, Y));
                nextX.CopyTo(originX);
                nextY.CopyTo(originY);
                before = at;
                if (k == TimeRule.Length)
                    continue;
                Jet(originX, originY, jets);
                for (var i = 0; i < x.Length; i++)
                    grown[i] += TimeRule[k].Weight * (jets.HessianXX[i] + jets.HessianYY[i]) * Length / parts;
            }
        }

        for (var i = 0; i < x.Length; i++)
        {
            volume[i] *= Math.Exp(grown[i]);
            if (!double.IsFinite(originX[i]) || !double.IsFinite(originY[i]) || !double.IsFinite(volume[i]))
                (originX[i], originY[i], volume[i]) = (double.NaN, double.NaN, 0);
        }
    }

    public override bool IsOneToOne(double hessianXX, double hessianXY, double hessianYY) => true;

    public override string Describe(double x, double y) => "";

    private static (double At, double Weight)[] Rule()
    {
        var rule = new MathNet.Numerics.Integration.GaussLegendreRule(0, 1, 6);
        return [.. Enumerable.Range(0, 6).Select(k => (rule.GetAbscissa(k), rule.GetWeight(k))).OrderBy(pair => pair.Item1)];
    }
}
