using FlowSolver.Problems;
using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// A kinked landscape in the plane that falls apart into lines, on which kinks are points and can be met exactly: V = A(x) + B(y), or V = f(|p − c|).
/// </summary>
internal sealed class PlaneStructure
{
    private const int Points = 24;

    private PlaneStructure(Potential first, Potential? second, double centerX, double centerY, double reach)
        => (First, Second, CenterX, CenterY, Reach) = (first, second, centerX, centerY, reach);

    /// <summary>A, or f.</summary>
    public Potential First { get; }

    /// <summary>B; null for a landscape around a point.</summary>
    public Potential? Second { get; }

    /// <summary>c.</summary>
    public double CenterX { get; }

    /// <summary>c.</summary>
    public double CenterY { get; }

    /// <summary>Distance from c to the farthest corner of the domain.</summary>
    public double Reach { get; }

    /// <summary>Whether V depends on the distance from a point alone.</summary>
    public bool IsRadial => Second is null;

    /// <summary>Finds the structure of a landscape that needs it; null when V is smooth or has none.</summary>
    public static PlaneStructure? Find(Potential potential, Domain domain)
    {
        if (domain.Y is null)
            return null;
        if (!potential.IsSmooth && LandscapeOnLine.Separate(potential, domain.X, domain.Y) is { } parts)
            return new PlaneStructure(parts.AlongX, parts.AlongY, 0, 0, 0);
        return domain.X.Ends == AxisEnds.Reflecting && domain.Y.Ends == AxisEnds.Reflecting ? FindRadial(potential, domain.X, domain.Y) : null;
    }

    private static PlaneStructure? FindRadial(Potential potential, Interval axisX, Interval axisY)
    {
        var x = new double[Points];
        var y = new double[Points];
        for (var k = 0; k < Points; k++)
        {
            // Fractional parts of multiples of two irrational numbers: scattered, and the same in every run.
            x[k] = axisX.From + axisX.Length * (0.7548776662466927 * (k + 1) % 1);
            y[k] = axisY.From + axisY.Length * (0.5698402909980532 * (k + 1) % 1);
        }

        double[] gx = new double[Points], gy = new double[Points];
        potential.Gradient(x, y, gx, gy);
        // The lines along two gradients meet in the centre.
        var cross = gx[0] * gy[1] - gy[0] * gx[1];
        if (!(Math.Abs(cross) > 1e-12 * (Math.Abs(gx[0]) + Math.Abs(gy[0])) * (Math.Abs(gx[1]) + Math.Abs(gy[1]))))
            return null;
        var along = ((x[1] - x[0]) * gy[1] - (y[1] - y[0]) * gx[1]) / cross;
        var (centerX, centerY) = (x[0] + along * gx[0], y[0] + along * gy[0]);
        // Centres are mostly written with few digits.
        var size = Math.Max(axisX.Length, axisY.Length);
        if (Math.Abs(centerX - Math.Round(centerX, 9)) < 1e-11 * size)
            centerX = Math.Round(centerX, 9);
        if (Math.Abs(centerY - Math.Round(centerY, 9)) < 1e-11 * size)
            centerY = Math.Round(centerY, 9);
        var reach = Math.Sqrt(
            Math.Pow(Math.Max(Math.Abs(axisX.From - centerX), Math.Abs(axisX.To - centerX)), 2)
            + Math.Pow(Math.Max(Math.Abs(axisY.From - centerY), Math.Abs(axisY.To - centerY)), 2));
        for (var k = 0; k < Points; k++)
        {
            var (dx, dy) = (x[k] - centerX, y[k] - centerY);
            var own = potential.ValueAt(x[k], y[k]);
            var onAxis = potential.ValueAt(centerX + Math.Sqrt(dx * dx + dy * dy), centerY);
            var turned = potential.ValueAt(centerX - dy, centerY + dx);
            var allowed = 1e-10 * (Math.Abs(own) + Math.Abs(onAxis));
            if (!(Math.Abs(own - onAxis) <= allowed) || !(Math.Abs(own - turned) <= allowed))
                return null;
        }

        var ray = new RadialPotential(potential, centerX, centerY);
        Span<double> slope = stackalloc double[2];
        ray.Gradient([1e-9 * reach, 0.5 * reach], [], slope, []);
        return Math.Abs(slope[0]) > 1e-6 * Math.Abs(slope[1]) ? new PlaneStructure(ray, null, centerX, centerY, reach) : null;
    }

    // f(r) = V(c + r·e), e a direction that is neither axis nor diagonal.
    private sealed class RadialPotential(Potential plane, double centerX, double centerY) : Potential
    {
        private const int Chunk = 256;
        private const double DirectionX = 0.8;
        private const double DirectionY = 0.6;

        public override int Dimension => 1;

        public override string Description => plane.Description;

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            Span<double> px = stackalloc double[Chunk];
            Span<double> py = stackalloc double[Chunk];
            for (var first = 0; first < x.Length; first += Chunk)
            {
                var part = Place(x, first, px, py);
                plane.Value(px[..part], py[..part], value.Slice(first, part));
            }
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            Span<double> px = stackalloc double[Chunk];
            Span<double> py = stackalloc double[Chunk];
            Span<double> gy = stackalloc double[Chunk];
            for (var first = 0; first < x.Length; first += Chunk)
            {
                var part = Place(x, first, px, py);
                var slope = gradientX.Slice(first, part);
                plane.Gradient(px[..part], py[..part], slope, gy[..part]);
                for (var i = 0; i < part; i++)
                    slope[i] = DirectionX * slope[i] + DirectionY * gy[i];
            }
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Span<double> px = stackalloc double[Chunk];
            Span<double> py = stackalloc double[Chunk];
            Span<double> gy = stackalloc double[Chunk];
            Span<double> hxy = stackalloc double[Chunk];
            Span<double> hyy = stackalloc double[Chunk];
            for (var first = 0; first < x.Length; first += Chunk)
            {
                var part = Place(x, first, px, py);
                var slope = target.GradientX.Slice(first, part);
                var curvature = target.HessianXX.Slice(first, part);
                plane.Jet(px[..part], py[..part], new PotentialJet
                {
                    Value = target.Value.Slice(first, part),
                    GradientX = slope,
                    GradientY = gy[..part],
                    HessianXX = curvature,
                    HessianXY = hxy[..part],
                    HessianYY = hyy[..part],
                });
                for (var i = 0; i < part; i++)
                {
                    slope[i] = DirectionX * slope[i] + DirectionY * gy[i];
                    curvature[i] = DirectionX * DirectionX * curvature[i] + 2 * DirectionX * DirectionY * hxy[i] + DirectionY * DirectionY * hyy[i];
                }
            }
        }

        private int Place(ReadOnlySpan<double> r, int first, Span<double> px, Span<double> py)
        {
            var part = Math.Min(Chunk, r.Length - first);
            for (var i = 0; i < part; i++)
                (px[i], py[i]) = (centerX + DirectionX * r[first + i], centerY + DirectionY * r[first + i]);
            return part;
        }
    }

    /// <summary>A map of the plane made of maps of lines.</summary>
    /// <param name="mapFirst">Moves x, or the distance from c; returns how many missed its tolerance.</param>
    /// <param name="mapSecond">Moves y; not used around a point.</param>
    /// <param name="x">First coordinates.</param>
    /// <param name="y">Second coordinates.</param>
    /// <param name="targetX">Receives first coordinates; may be <paramref name="x"/> itself.</param>
    /// <param name="targetY">Receives second coordinates; may be <paramref name="y"/> itself.</param>
    /// <param name="domain">Where walkers can be: a walker pushed out along a ray stops at the wall.</param>
    public int Apply<TMap>(
        TMap mapFirst, TMap? mapSecond, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY, Domain domain)
        where TMap : struct, ILineMap
    {
        if (mapSecond is { } second)
            return mapFirst.Apply(x, targetX) + second.Apply(y, targetY);
        const int chunk = 256;
        Span<double> before = stackalloc double[chunk];
        Span<double> after = stackalloc double[chunk];
        var missed = 0;
        for (var first = 0; first < x.Length; first += chunk)
        {
            var part = Math.Min(chunk, x.Length - first);
            for (var i = 0; i < part; i++)
            {
                var (dx, dy) = (x[first + i] - CenterX, y[first + i] - CenterY);
                before[i] = Math.Sqrt(dx * dx + dy * dy);
            }

            missed += mapFirst.Apply(before[..part], after[..part]);
            for (var i = 0; i < part; i++)
            {
                var share = before[i] > 0 ? after[i] / before[i] : 0;
                targetX[first + i] = Math.Clamp(CenterX + share * (x[first + i] - CenterX), domain.X.From, domain.X.To);
                targetY[first + i] = Math.Clamp(CenterY + share * (y[first + i] - CenterY), domain.Y!.From, domain.Y.To);
            }
        }

        return missed;
    }

    /// <summary>A map of a line.</summary>
    public interface ILineMap
    {
        /// <summary>Moves points; returns how many missed the tolerance.</summary>
        int Apply(ReadOnlySpan<double> x, Span<double> target);
    }
}
