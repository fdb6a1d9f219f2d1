using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>Transport for a length (step times mobility).</summary>
internal readonly record struct TransportLeg(TransportMap Map, double Length);

/// <summary>Several maps of a line one after the other; between them points that left the domain are reflected or wrapped. Immutable.</summary>
internal sealed class ChainOnLine
{
    private readonly TransportOnLine[] maps;
    private readonly Interval interval;
    private readonly bool periodic;

    public ChainOnLine(Potential potential, Axis axis, IReadOnlyList<TransportLeg> legs)
    {
        interval = axis.Interval;
        periodic = axis.IsPeriodic;
        maps = [.. legs.Select(leg => TransportOnLine.Create(leg.Map, potential, axis.Interval, leg.Length, axis.Cells))];
        var points = new List<double>();
        for (var k = 0; k < maps.Length; k++)
        {
            foreach (var point in maps[k].Breakpoints)
            {
                if (k == 0)
                    points.Add(point);
                else
                    points.AddRange(TransportOnLine.FindPreimages(x => interval.Fold(Through(x, k)), point, interval, Math.Max(axis.Cells, 256)));
            }
        }

        if (periodic && Math.Abs(At(interval.From) + interval.Length - At(interval.To)) > 1e-9 * interval.Length)
            points.Add(interval.From);
        Breakpoints = [.. points.Where(p => p >= interval.From && p < interval.To).Distinct().Order()];
        // A wall that the map moves is a kink of the map continued beyond it.
        MovedEnds = periodic ? [] : [.. new[] { interval.From, interval.To }.Where(end => Math.Abs(At(end) - end) > 1e-13 * interval.Length)];
        Warning = Array.Find(maps, map => map.Warning is not null)?.Warning;
    }

    /// <summary>Places where the map or its slope jumps.</summary>
    public double[] Breakpoints { get; }

    /// <summary>Walls that do not stay where they are.</summary>
    public double[] MovedEnds { get; }

    /// <summary>A sentence for the reader, or null.</summary>
    public string? Warning { get; }

    /// <summary>Writes the images; on a circle they go on counting beyond the seam, at walls the last map may lead outside.</summary>
    public void Map(ReadOnlySpan<double> x, Span<double> mapped) => Map(x, mapped, maps.Length);

    /// <summary>The image of one point.</summary>
    public double At(double x) => Through(x, maps.Length);

    private double Through(double x, int count)
    {
        double result = 0;
        Map([x], new Span<double>(ref result), count);
        return result;
    }

    private void Map(ReadOnlySpan<double> x, Span<double> mapped, int count)
    {
        if (count == 0)
        {
            x.CopyTo(mapped);
            return;
        }

        if (count == 1)
        {
            maps[0].Map(x, mapped);
            return;
        }

        var turns = new double[x.Length];
        var at = x.ToArray();
        for (var k = 0; k < count; k++)
        {
            maps[k].Map(at, mapped);
            for (var i = 0; i < at.Length && k + 1 < count; i++)
            {
                at[i] = interval.Fold(mapped[i]);
                if (periodic)
                    turns[i] += mapped[i] - at[i];
            }
        }

        for (var i = 0; i < at.Length; i++)
            mapped[i] += turns[i];
    }
}

/// <summary>Several maps of the plane one after the other; between them points that left the domain are reflected or wrapped. Immutable.</summary>
internal sealed class ChainOnPlane
{
    private readonly TransportOnPlane[] maps;
    private readonly Potential potential;
    private readonly Interval intervalX;
    private readonly Interval intervalY;

    public ChainOnPlane(Potential potential, Axis axisX, Axis axisY, IReadOnlyList<TransportLeg> legs)
    {
        (intervalX, intervalY) = (axisX.Interval, axisY.Interval);
        maps = [.. legs.Select(leg => TransportOnPlane.Create(leg.Map, potential, leg.Length, intervalX, intervalY))];
        this.potential = potential;
        Examine();
    }

    /// <summary>A sentence for the reader, or null.</summary>
    public string? Warning { get; private set; }

    /// <summary>Share of a density's mass that stands where a map is not one-to-one.</summary>
    /// <param name="density">Densities, x fastest.</param>
    /// <param name="axisX">First axis.</param>
    /// <param name="axisY">Second axis.</param>
    public double FoldedShare(double[] density, Axis axisX, Axis axisY)
    {
        if (Warning is null)
            return 0;
        var (folded, total) = (0.0, 0.0);
        var count = axisX.Cells;
        var (x, y) = (axisX.Centers(), new double[count]);
        var parts = new double[6 * count];
        for (var row = 0; row < axisY.Cells; row++)
        {
            Array.Fill(y, axisY.Center(row));
            Derivatives(x, y, parts);
            for (var i = 0; i < count; i++)
            {
                var mass = density[row * count + i];
                total += mass;
                foreach (var map in maps)
                {
                    if (map.IsOneToOne(parts[3 * count + i], parts[4 * count + i], parts[5 * count + i]))
                        continue;
                    folded += mass;
                    break;
                }
            }
        }

        return folded / total;
    }

    /// <summary>Writes the images; the last map may lead outside the domain. At most <see cref="TransportOnPlane.Chunk"/> points.</summary>
    public void Map(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> mappedX, Span<double> mappedY)
    {
        maps[0].Map(x, y, mappedX, mappedY);
        if (maps.Length == 1)
            return;
        var (atX, atY) = (new double[x.Length], new double[x.Length]);
        for (var k = 1; k < maps.Length; k++)
        {
            for (var i = 0; i < atX.Length; i++)
                (atX[i], atY[i]) = (intervalX.Fold(mappedX[i]), intervalY.Fold(mappedY[i]));
            maps[k].Map(atX, atY, mappedX, mappedY);
        }
    }

    /// <summary>Writes the points that are mapped to the given ones, and the volume ratio; NaN and 0 where there is none in the domain.</summary>
    public void MapBack(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> originX, Span<double> originY, Span<double> volume)
    {
        volume.Fill(1);
        var (atX, atY) = (x.ToArray(), y.ToArray());
        for (var k = maps.Length - 1; k >= 0; k--)
        {
            maps[k].MapBack(atX, atY, originX, originY, volume);
            for (var i = 0; i < atX.Length; i++)
            {
                (originX[i], originY[i]) = (Bring(intervalX, originX[i]), Bring(intervalY, originY[i]));
                if (double.IsNaN(originX[i]) || double.IsNaN(originY[i]))
                    volume[i] = 0;
                (atX[i], atY[i]) = (originX[i], originY[i]);
            }
        }

        static double Bring(Interval interval, double position)
            => interval.Ends == AxisEnds.Periodic ? interval.Fold(position)
                : position >= interval.From - 1e-12 * interval.Length && position <= interval.To + 1e-12 * interval.Length ? position : double.NaN;
    }

    private void Derivatives(ReadOnlySpan<double> x, ReadOnlySpan<double> y, double[] parts) => potential.Jet(x, y, new PotentialJet
    {
        Value = parts.AsSpan(0, x.Length),
        GradientX = parts.AsSpan(x.Length, x.Length),
        GradientY = parts.AsSpan(2 * x.Length, x.Length),
        HessianXX = parts.AsSpan(3 * x.Length, x.Length),
        HessianXY = parts.AsSpan(4 * x.Length, x.Length),
        HessianYY = parts.AsSpan(5 * x.Length, x.Length),
    });

    private void Examine()
    {
        const int side = 128;
        Span<double> x = stackalloc double[side];
        Span<double> y = stackalloc double[side];
        var parts = new double[6 * side];
        for (var row = 0; row < side; row++)
        {
            for (var i = 0; i < side; i++)
                (x[i], y[i]) = (intervalX.From + intervalX.Length * (i + 0.5) / side, intervalY.From + intervalY.Length * (row + 0.5) / side);
            Derivatives(x, y, parts);
            for (var i = 0; i < side; i++)
            {
                foreach (var map in maps)
                {
                    if (map.IsOneToOne(parts[3 * side + i], parts[4 * side + i], parts[5 * side + i]))
                        continue;
                    Warning = map.Describe(x[i], y[i]);
                    return;
                }
            }
        }
    }
}
