using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// A density on its way under a recipe. The density held is the one after the last noise that was carried out; maps and noise that came since are pending, so that
/// they can be merged with what comes next, and are carried out on a copy when the density is asked for.
/// </summary>
internal sealed class SplittingRun : FlowRun
{
    private const int MostCells = 1 << 22;
    private const int MostPrepared = 6;
    private const int BandCells = 2;
    private const double BandShare = 1e-8;

    private readonly SplitPart[] parts;
    private readonly (Potential AlongX, Potential AlongY)? separated;
    private readonly List<TransportLeg> pendingLegs = new(8);
    private readonly List<TransportAndNoise> prepared = new(MostPrepared);
    private readonly List<(double Length, GaussianConvolution Convolution)> heat = new(MostPrepared);
    private readonly List<(TransportLeg[] Legs, Action<double[], double[], double[]> Apply)> pushes = new(MostPrepared);
    private double pendingNoise;
    private double resolvedLength = double.PositiveInfinity;
    private Axis axisX;
    private Axis? axisY;
    private int finerX = 1;
    private int finerY = 1;
    private double[] density;
    private double[] copy = [];
    private double[] spare = [];
    private bool wallsMatter;
    private string? news;
    private string? failure;

    public SplittingRun(SplitRecipe recipe, GridProblem problem, Density start, WorkerTeam team) : base(problem, team)
    {
        parts = [.. recipe.Parts];
        (axisX, axisY) = (problem.Grid.X, problem.Grid.Y);
        density = (double[])start.Values.Clone();
        if (axisY is not null)
            separated = LandscapeOnLine.Separate(problem.Problem.Potential, axisX.Interval, axisY.Interval);
    }

    /// <inheritdoc/>
    protected override StepReport AdvanceCore(double step)
    {
        var mobility = Problem.Problem.Mobility;
        Resolve(step * mobility);
        foreach (var part in parts)
        {
            var length = mobility * part.Fraction * step;
            if (part.Map is { } map)
            {
                if (pendingNoise > 0)
                    CarryOut(density);
                // Two stretches of the same flow are one.
                if (map == TransportMap.Characteristic && pendingLegs.Count > 0 && pendingLegs[^1].Map == map)
                    pendingLegs[^1] = new TransportLeg(map, pendingLegs[^1].Length + length);
                else
                    pendingLegs.Add(new TransportLeg(map, length));
            }
            else
            {
                pendingNoise += length;
            }
        }

        // The next step begins with a map, so that nothing can be merged with this noise any more.
        if (pendingNoise > 0 && parts[0].Map is not null)
            CarryOut(density);
        var report = new StepReport(Failure: failure, Warning: news);
        news = null;
        return report;
    }

    /// <summary>Goes on from another density on the problem's grid, as after a finished step; time and count go on.</summary>
    internal void Replace(ReadOnlySpan<double> values)
    {
        Require.Length(values.Length, Problem.Grid.CellCount);
        pendingLegs.Clear();
        pendingNoise = 0;
        if (finerX == 1 && finerY == 1)
            values.CopyTo(density);
        else
            density = Refinement.Refine(values.ToArray(), Problem.Grid.X, Problem.Grid.Y, finerX, finerY);
        Normalise(density);
    }

    /// <inheritdoc/>
    public override void WriteDensity(Span<double> destination)
    {
        Require.Length(destination.Length, Problem.Grid.CellCount);
        var values = density;
        if (pendingLegs.Count > 0 || pendingNoise > 0)
        {
            Array.Resize(ref copy, density.Length);
            density.CopyTo(copy, 0);
            values = copy;
            if (pendingNoise > 0)
            {
                Execute(copy);
            }
            else
            {
                Array.Resize(ref spare, density.Length);
                var target = new double[density.Length];
                PushFor()(copy, spare, target);
                values = target;
                Normalise(values);
            }
        }

        Coarsen(values, destination);
    }

    // Carries out what is pending, in place.
    private void CarryOut(double[] values)
    {
        Execute(values);
        pendingLegs.Clear();
        pendingNoise = 0;
    }

    private void Execute(double[] values)
    {
        if (pendingLegs.Count == 0)
            HeatFor().Apply(values, values, Team);
        else
            PlanFor(values).Apply(values, values, Team);
        Normalise(values);
    }

    // Scaled by one factor; what remains of the sum's own rounding is below 1e-13.
    private void Normalise(double[] values)
    {
        var volume = axisX.Width * (axisY?.Width ?? 1);
        SpanKernels.Scale(values, 1 / (SpanKernels.Sum(values) * volume));
    }

    private TransportAndNoise PlanFor(double[] values)
    {
        var variance = 2 * Problem.Problem.Temperature * pendingNoise;
        wallsMatter = wallsMatter || WallsMatter(values);
        foreach (var plan in prepared)
        {
            if (plan.Serves(pendingLegs, variance, wallsMatter))
                return plan;
        }

        if (prepared.Count == MostPrepared)
            prepared.RemoveAt(0);
        var legs = pendingLegs.ToArray();
        var maps = new MapsOnGrid(Problem.Problem.Potential, separated, axisX, axisY, legs);
        var made = new TransportAndNoise(maps, legs, variance, wallsMatter, values, Team);
        news ??= made.Warning;
        failure ??= made.Failure;
        prepared.Add(made);
        return made;
    }

    private GaussianConvolution HeatFor()
    {
        foreach (var (length, convolution) in heat)
        {
            if (length == pendingNoise)
                return convolution;
        }

        if (heat.Count == MostPrepared)
            heat.RemoveAt(0);
        var variance = 2 * Problem.Problem.Temperature * pendingNoise;
        var made = new GaussianConvolution(axisX.Cells, axisY?.Cells ?? 1, axisX.IsPeriodic, axisY?.IsPeriodic ?? false,
            variance / (axisX.Width * axisX.Width), axisY is null ? 0 : variance / (axisY.Width * axisY.Width), Team.Size);
        heat.Add((pendingNoise, made));
        return made;
    }

    private Action<double[], double[], double[]> PushFor()
    {
        foreach (var (legs, apply) in pushes)
        {
            if (pendingLegs.SequenceEqual(legs))
                return apply;
        }

        if (pushes.Count == MostPrepared)
            pushes.RemoveAt(0);
        var wanted = pendingLegs.ToArray();
        var maps = new MapsOnGrid(Problem.Problem.Potential, separated, axisX, axisY, wanted);
        news ??= maps.Warning;
        var made = maps.PushForward(density, Team);
        pushes.Add((wanted, made));
        return made;
    }

    // A wall that the map moves needs points of its own only once there is mass near walls.
    private bool WallsMatter(double[] values)
    {
        if (axisX.IsPeriodic && axisY is not { IsPeriodic: false })
            return false;
        var largest = SpanKernels.MaxAbs(values) * BandShare;
        var (countX, countY) = (axisX.Cells, axisY?.Cells ?? 1);
        var band = Math.Min(BandCells, countX);
        for (var row = 0; row < countY; row++)
        {
            var line = values.AsSpan(row * countX, countX);
            var nearWall = axisY is { IsPeriodic: false } && (row < BandCells || row >= countY - BandCells);
            if (nearWall ? SpanKernels.MaxAbs(line) > largest
                : !axisX.IsPeriodic && Math.Max(SpanKernels.MaxAbs(line[..band]), SpanKernels.MaxAbs(line[(countX - band)..])) > largest)
            {
                return true;
            }
        }

        return false;
    }

    // Refines the run's own grid until the narrowest noise of a step is a normal density on it.
    private void Resolve(double length)
    {
        if (length >= resolvedLength)
            return;
        resolvedLength = length;
        var shortest = 1.0;
        var hasNoise = false;
        foreach (var part in parts)
        {
            if (part.Map is null)
                (shortest, hasNoise) = (Math.Min(shortest, part.Fraction), true);
        }

        if (!hasNoise)
            return;
        var deviation = Math.Sqrt(2 * Problem.Problem.Temperature * shortest * length / GaussianSpreading.LeastVariance);
        if (axisX.Width <= 0.5 * deviation && axisY is not { } other || axisX.Width <= 0.5 * deviation && axisY!.Width <= 0.5 * deviation)
            return;
        var stretch = Stretch(length);
        var (moreX, moreY) = (Times(axisX), axisY is null ? 1 : Times(axisY));
        while (moreX * (long)moreY > 1 && axisX.Cells * (long)moreX * ((axisY?.Cells ?? 1) * (long)moreY) > MostCells)
        {
            if (moreX >= moreY)
                moreX -= 2;
            else
                moreY -= 2;
        }

        if (axisX.Width / moreX > deviation * 1.0000001 || axisY?.Width / moreY > deviation * 1.0000001)
        {
            news ??= FormattableString.Invariant(
                $"The noise of a step is only {deviation * Math.Sqrt(GaussianSpreading.LeastVariance) / Math.Max(axisX.Width / moreX, (axisY?.Width ?? 0) / moreY):g2} cells wide, even on the finest cells allowed: the grid error is of second order and slopes above 2T per cell spread too much. Take longer steps.");
        }

        if (moreX == 1 && moreY == 1)
            return;
        if (pendingNoise > 0)
            CarryOut(density);
        density = Refinement.Refine(density, axisX, axisY, moreX, moreY);
        (finerX, finerY) = (finerX * moreX, finerY * moreY);
        axisX = new Axis(axisX.Interval, axisX.Cells * moreX);
        axisY = axisY is null ? null : new Axis(axisY.Interval, axisY.Cells * moreY);
        prepared.Clear();
        heat.Clear();
        pushes.Clear();
        Normalise(density);

        int Times(Axis axis)
        {
            var times = (int)Math.Min(Math.Ceiling(axis.Width * stretch / deviation - 1e-9), MostCells);
            return Math.Max(1, times | 1);
        }
    }

    // The largest factor by which the maps of one step pull neighbours apart where there is mass now or at equilibrium, at most 2.
    private double Stretch(double length)
    {
        var grid = Problem.Grid;
        var (x, y) = (new double[grid.Nx], new double[grid.Y is null ? 0 : grid.Nx]);
        var jet = new double[6][];
        for (var k = 0; k < jet.Length; k++)
            jet[k] = new double[grid.Nx];
        var equilibrium = Problem.Equilibrium.Values;
        var floor = 1e-8 * SpanKernels.MaxAbs(equilibrium);
        Span<double> now = new double[grid.CellCount];
        if (finerX == 1 && finerY == 1)
            density.CopyTo(now);
        else
            Coarsen(density, now);
        var floorNow = 1e-8 * SpanKernels.MaxAbs(now);
        var (least, most) = (0.0, 0.0);
        for (var row = 0; row < grid.Ny; row++)
        {
            grid.RowCenters(row, x, y);
            Problem.Problem.Potential.Jet(x, y, new PotentialJet
            {
                Value = jet[0],
                GradientX = jet[1],
                GradientY = grid.Y is null ? [] : jet[2],
                HessianXX = jet[3],
                HessianXY = grid.Y is null ? [] : jet[4],
                HessianYY = grid.Y is null ? [] : jet[5],
            });
            for (var i = 0; i < grid.Nx; i++)
            {
                var cell = row * grid.Nx + i;
                if (equilibrium[cell] < floor && now[cell] < floorNow)
                    continue;
                var (xx, xy, yy) = (jet[3][i], grid.Y is null ? 0 : jet[4][i], grid.Y is null ? jet[3][i] : jet[5][i]);
                var (middle, reach) = (0.5 * (xx + yy), Math.Sqrt(0.25 * (xx - yy) * (xx - yy) + xy * xy));
                if (double.IsFinite(middle) && double.IsFinite(reach))
                    (least, most) = (Math.Min(least, middle - reach), Math.Max(most, middle + reach));
            }
        }

        var stretch = 1.0;
        foreach (var part in parts)
        {
            var t = part.Fraction * length;
            stretch *= part.Map switch
            {
                TransportMap.Gradient => Math.Max(1 - t * least, Math.Abs(1 - t * most)),
                TransportMap.Proximal => 1 + t * least > 0.5 ? 1 / (1 + t * least) : 2,
                TransportMap.Characteristic => Math.Exp(Math.Min(-t * least, 1)),
                _ => 1,
            };
        }

        return Math.Clamp(stretch, 1, 2);
    }

    private void Coarsen(double[] values, Span<double> destination)
    {
        if (finerX == 1 && finerY == 1)
        {
            values.CopyTo(destination);
            return;
        }

        Refinement.Coarsen(values, axisX.Cells, finerX, finerY, destination, Problem.Grid.Nx);
        SpanKernels.Scale(destination, 1 / (SpanKernels.Sum(destination) * Problem.Grid.CellVolume));
    }
}
