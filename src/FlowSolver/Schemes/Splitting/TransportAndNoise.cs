using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// One or more maps followed by noise, prepared for one grid and one set of lengths: ρ′(y) = ∫ ρ(x) G(y − P(x)) dx with the masses at P(x), not at cell centres.
/// Not safe for use from two threads at once.
/// </summary>
internal sealed class TransportAndNoise
{
    // On the plane every point of an axis is a whole row of points.
    private const double FadeOnLine = 2.5;
    private const double FadeOnPlane = 1.5;

    private readonly TransportLeg[] legs;
    private readonly double variance;
    private readonly bool withWalls;
    private readonly AxisQuadrature pointsX;
    private readonly AxisQuadrature? pointsY;
    private readonly GaussianSpreading spreading;
    private readonly double[] masses;
    private readonly int countX;
    private readonly int countY;
    private readonly int widthX;
    private readonly int widthY;
    private readonly Action<int> rowBlock;
    private double[] source = [];

    /// <summary>Prepares the maps.</summary>
    /// <param name="maps">The maps on this grid.</param>
    /// <param name="legs">What they were made from, for comparison.</param>
    /// <param name="variance">Variance of the noise on each axis, in squared length.</param>
    /// <param name="withWalls">Whether walls that move get points of their own.</param>
    /// <param name="density">The density now: what is said about the maps concerns places where there is mass.</param>
    /// <param name="team">Threads.</param>
    public TransportAndNoise(MapsOnGrid maps, TransportLeg[] legs, double variance, bool withWalls, double[] density, WorkerTeam team)
    {
        (this.legs, this.variance, this.withWalls) = (legs, variance, withWalls);
        var (axisX, axisY) = (maps.X, maps.Y);
        var fade = axisY is null ? FadeOnLine : FadeOnPlane;
        pointsX = new AxisQuadrature(axisX, [.. maps.BreakpointsX, .. withWalls ? maps.MovedEndsX : []], fade);
        pointsY = axisY is null ? null : new AxisQuadrature(axisY, [.. maps.BreakpointsY, .. withWalls ? maps.MovedEndsY : []], fade);
        (countX, countY) = (axisX.Cells, axisY?.Cells ?? 1);
        (widthX, widthY) = (pointsX.Positions.Length, pointsY?.Positions.Length ?? 1);
        var count = checked(widthX * widthY);
        var placeX = new double[count];
        var placeY = new double[axisY is null ? 0 : count];
        maps.Map(pointsX.Positions, pointsY?.Positions ?? [], placeX, placeY, team);
        Warning = maps.Warning;
        Inspect(maps, placeX, placeY, density);
        for (var i = 0; i < count; i++)
        {
            placeX[i] = (axisX.Interval.Fold(placeX[i]) - axisX.Interval.From) / axisX.Width - 0.5;
            if (axisY is not null)
                placeY[i] = (axisY.Interval.Fold(placeY[i]) - axisY.Interval.From) / axisY.Width - 0.5;
        }

        spreading = new GaussianSpreading(countX, countY, axisX.IsPeriodic, axisY?.IsPeriodic ?? false, variance / (axisX.Width * axisX.Width),
            axisY is null ? 0 : variance / (axisY.Width * axisY.Width), placeX, placeY, team.Size);
        masses = pointsX.IsPlain && pointsY is not { IsPlain: false } ? [] : new double[count];
        rowBlock = FillRow;
    }

    /// <summary>A sentence for the reader, or null.</summary>
    public string? Warning { get; private set; }

    /// <summary>A sentence when the maps cannot be used, or null.</summary>
    public string? Failure { get; private set; }

    /// <summary>Whether this was prepared for the given lengths.</summary>
    public bool Serves(List<TransportLeg> wanted, double wantedVariance, bool wantedWalls)
    {
        if (wanted.Count != legs.Length || wantedVariance != variance || wantedWalls != withWalls)
            return false;
        for (var i = 0; i < legs.Length; i++)
        {
            if (wanted[i] != legs[i])
                return false;
        }

        return true;
    }

    /// <summary>Writes the density after maps and noise; <paramref name="destination"/> may be <paramref name="density"/>.</summary>
    public void Apply(double[] density, double[] destination, WorkerTeam team)
    {
        if (masses.Length == 0)
        {
            spreading.Apply(density, destination, team);
            return;
        }

        source = density;
        team.Run(countY, rowBlock);
        source = [];
        if (pointsY is { IsPlain: false } points)
        {
            for (var column = 0; column < widthX; column++)
                points.WriteExtras(masses.AsSpan(column), widthX, masses.AsSpan(countY * widthX + column));
            for (var row = 0; row < countY; row++)
            {
                if (points.CellFactor[row] != 1)
                    SpanKernels.Scale(masses.AsSpan(row * widthX, widthX), points.CellFactor[row]);
            }
        }

        spreading.Apply(masses, destination, team);
    }

    private void FillRow(int row)
    {
        var from = source.AsSpan(row * countX, countX);
        var to = masses.AsSpan(row * widthX, widthX);
        from.CopyTo(to);
        if (pointsX.IsPlain)
            return;
        pointsX.WriteExtras(from, 1, to[countX..]);
        for (var i = 0; i < countX; i++)
            to[i] *= pointsX.CellFactor[i];
    }

    private void Inspect(MapsOnGrid maps, double[] placeX, double[] placeY, double[] density)
    {
        var (thrown, total) = (0.0, 0.0);
        for (var row = 0; row < countY; row++)
        {
            for (var i = 0; i < countX; i++)
            {
                var at = row * widthX + i;
                var mass = density[row * countX + i];
                total += mass;
                var finite = double.IsFinite(placeX[at]) && (maps.Y is null || double.IsFinite(placeY[at]));
                if (!finite && mass > 0)
                {
                    var y = maps.Y is null ? "" : FormattableString.Invariant($", y = {maps.Y.Center(row):g4}");
                    Failure = FormattableString.Invariant($"The map of the step is not finite at x = {maps.X.Center(i):g4}{y}, where there is mass.");
                }
                else if (finite && (Leaves(maps.X, placeX[at]) || (maps.Y is not null && Leaves(maps.Y, placeY[at]))))
                {
                    thrown += mass;
                }
            }
        }

        for (var i = 0; i < placeX.Length; i++)
        {
            if (!double.IsFinite(placeX[i]))
                placeX[i] = pointsX.Positions[i % widthX];
            if (placeY.Length > 0 && !double.IsFinite(placeY[i]))
                placeY[i] = pointsY!.Positions[i / widthX];
        }

        if (thrown > 1e-6 * total)
        {
            Warning ??= FormattableString.Invariant(
                $"The map of the step leads a share of {thrown / total:g2} of the mass out of the domain; it is reflected at the walls.");
        }

        static bool Leaves(Axis axis, double position)
            => !axis.IsPeriodic && (position < axis.Interval.From - 1e-9 * axis.Width || position > axis.Interval.To + 1e-9 * axis.Width);
    }
}

/// <summary>The maps of one or more legs on a grid: by axes where the landscape is a sum of a function of x and one of y, else on the plane. Immutable.</summary>
internal sealed class MapsOnGrid
{
    // Less folded mass than this is left out of a pull-back, which sees one preimage only.
    private const double FoldedMass = 1e-6;
    private readonly ChainOnLine? alongX;
    private readonly ChainOnLine? alongY;
    private readonly ChainOnPlane? onPlane;

    public MapsOnGrid(Potential potential, (Potential AlongX, Potential AlongY)? separated, Axis x, Axis? y, IReadOnlyList<TransportLeg> legs)
    {
        (X, Y) = (x, y);
        if (y is null)
        {
            alongX = new ChainOnLine(potential, x, legs);
        }
        else if (separated is { } parts)
        {
            alongX = new ChainOnLine(parts.AlongX, x, legs);
            alongY = new ChainOnLine(parts.AlongY, y, legs);
        }
        else
        {
            onPlane = new ChainOnPlane(potential, x, y, legs);
        }
    }

    /// <summary>First axis.</summary>
    public Axis X { get; }

    /// <summary>Second axis, or null.</summary>
    public Axis? Y { get; }

    public double[] BreakpointsX => alongX?.Breakpoints ?? [];

    public double[] BreakpointsY => alongY?.Breakpoints ?? [];

    public double[] MovedEndsX => alongX?.MovedEnds ?? Ends(X);

    public double[] MovedEndsY => alongY?.MovedEnds ?? (Y is null ? [] : Ends(Y));

    /// <summary>A sentence for the reader, or null.</summary>
    public string? Warning => onPlane?.Warning ?? alongX?.Warning ?? alongY?.Warning;

    /// <summary>Writes the images of all pairs of an x and a y, x fastest.</summary>
    public void Map(double[] x, double[] y, double[] mappedX, double[] mappedY, WorkerTeam team)
    {
        if (alongX is not null)
        {
            alongX.Map(x, mappedX.AsSpan(0, x.Length));
            if (alongY is null)
                return;
            var images = new double[y.Length];
            alongY.Map(y, images);
            for (var row = 0; row < y.Length; row++)
            {
                if (row > 0)
                    mappedX.AsSpan(0, x.Length).CopyTo(mappedX.AsSpan(row * x.Length, x.Length));
                mappedY.AsSpan(row * x.Length, x.Length).Fill(images[row]);
            }

            return;
        }

        team.Run(y.Length, row =>
        {
            Span<double> held = stackalloc double[TransportOnPlane.Chunk];
            held.Fill(y[row]);
            for (var first = 0; first < x.Length; first += TransportOnPlane.Chunk)
            {
                var part = Math.Min(TransportOnPlane.Chunk, x.Length - first);
                var at = row * x.Length + first;
                onPlane!.Map(x.AsSpan(first, part), held[..part], mappedX.AsSpan(at, part), mappedY.AsSpan(at, part));
            }
        });
    }

    /// <summary>Makes what carries a density through the maps without noise: source, work array of the same length, destination.</summary>
    /// <param name="density">The density now: folds matter where there is mass.</param>
    /// <param name="team">Threads.</param>
    public Action<double[], double[], double[]> PushForward(double[] density, WorkerTeam team)
    {
        if (onPlane is not null && onPlane.FoldedShare(density, X, Y!) < FoldedMass)
            return new PullBackOnPlane(onPlane, X, Y!, team).Apply;
        if (onPlane is not null)
        {
            // No single preimage to look at: masses go to the two nearest cells an axis, which keeps mass and mean.
            var (placeX, placeY) = (new double[X.Cells * Y!.Cells], new double[X.Cells * Y.Cells]);
            Map(X.Centers(), Y.Centers(), placeX, placeY, team);
            for (var i = 0; i < placeX.Length; i++)
            {
                placeX[i] = (X.Interval.Fold(placeX[i]) - X.Interval.From) / X.Width - 0.5;
                placeY[i] = (Y.Interval.Fold(placeY[i]) - Y.Interval.From) / Y.Width - 0.5;
            }

            var spreading = new GaussianSpreading(X.Cells, Y.Cells, X.IsPeriodic, Y.IsPeriodic, 0, 0, placeX, placeY, team.Size);
            return (source, _, destination) => spreading.Apply(source, destination, team);
        }

        var pushX = new PushForwardOnLine(alongX!, X);
        var pushY = alongY is null ? null : new PushForwardOnLine(alongY, Y!);
        return (source, _, destination) =>
        {
            var count = X.Cells;
            for (var row = 0; row < source.Length / count; row++)
                pushX.Apply(source.AsSpan(row * count, count), destination.AsSpan(row * count, count), 1, X);
            for (var column = 0; pushY is not null && column < count; column++)
                pushY.Apply(destination.AsSpan(column), destination.AsSpan(column), count, Y!);
        };
    }

    private static double[] Ends(Axis axis) => axis.IsPeriodic ? [] : [axis.Interval.From, axis.Interval.To];
}
