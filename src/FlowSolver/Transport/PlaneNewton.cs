using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Newton's method for the transport of a to b between smooth densities: the potential φ on b's side with b(y) = a(y + ∇φ) det(I + D²φ), so that
/// y ↦ y + ∇φ(y) carries b back to a.
/// </summary>
/// <remarks>
/// Newton on the logarithm of the Monge-Ampère equation (G. Loeper, F. Rapetti, C. R. Acad. Sci. Paris 340 (2005) 319-324, with damping): with
/// R = log b − log a(y + ∇φ) − log det(I + D²φ) the update solves −∇·(w (I + D²φ)⁻¹ ∇δ) = −w (R − mean of R under w). Departures: divergence
/// form with the weight w = √(b · pulled density) (exact at the solution, and half way between the two gradients of log density far from it); a floor of 10⁻¹² of the largest weight continues the update harmonically into the tails. Derivatives by
/// differences of fourth order, even across walls where mass touches them; log a between the cells by the cubic through four neighbours an axis. R is formed from differences
/// of logarithms, so that densities that differ by 10⁻⁸ still give digits. For normal densities log R is a quadratic and a few steps do.
/// </remarks>
internal sealed class PlaneNewton
{
    private const double Floor = 1e-12;

    // Of the largest density of b: below it the equation fades out, and the potential continues smoothly.
    private const double Fade = 1e-9;

    // Of the largest density of b: a wall cell with less is treated as an open end, φ running on through the wall. Mirroring φ there would bend it
    // sharply for the sake of mass that is not there.
    private const double Open = 1e-5;
    private const int Ghosts = 2;
    private const double LeastEigenvalue = 0.02;
    private const double MostEigenvalue = 50;
    private const double Tiny = 1e-300;
    private const int RowsPerBlock = 16;
    private readonly WorkerTeam team;
    private readonly int nx;
    private readonly int ny;
    private readonly double widthX;
    private readonly double widthY;
    private readonly int stride;
    private readonly double[] padded;
    private readonly double[] slopes;
    private readonly bool[] openWest;
    private readonly bool[] openEast;
    private readonly bool[] openSouth;
    private readonly bool[] openNorth;
    private readonly int blocks;
    private readonly PlaneElliptic elliptic;
    private readonly double[] logSource;
    private readonly double[] logRatio;
    private readonly double[] source;
    private readonly double[] target;
    private readonly double[] trial;
    private readonly double[] update;
    private readonly double[] right;
    private readonly double[] stiffXX;
    private readonly double[] stiffXY;
    private readonly double[] stiffYY;
    private readonly double[] mismatch;
    private readonly double[] weights;
    private readonly double[] partial;
    private readonly Action<int> paddingJob;
    private readonly Action<int> slopeJob;
    private readonly Action<int> gradientJob;
    private readonly Action<int> mismatchJob;
    private readonly Action<int> stiffnessJob;
    private double[] current;
    private double fade;

    public PlaneNewton(Grid grid, WorkerTeam team)
    {
        this.team = team;
        Grid = grid;
        (nx, ny) = (grid.Nx, grid.Ny);
        (widthX, widthY) = (grid.X.Width, grid.Y!.Width);
        stride = nx + 2 * Ghosts;
        padded = new double[stride * (ny + 2 * Ghosts)];
        slopes = new double[nx * (ny + 2 * Ghosts)];
        (openWest, openEast, openSouth, openNorth) = (new bool[ny], new bool[ny], new bool[nx], new bool[nx]);
        blocks = (ny + RowsPerBlock - 1) / RowsPerBlock;
        elliptic = new PlaneElliptic(nx, ny, grid.X.IsPeriodic, grid.Y.IsPeriodic, widthX, widthY, team) { HasCorners = true };
        var cells = grid.CellCount;
        Potential = new double[cells];
        GradientX = new double[cells];
        GradientY = new double[cells];
        Pulled = new double[cells];
        logSource = new double[cells];
        logRatio = new double[cells];
        source = new double[cells];
        target = new double[cells];
        trial = new double[cells];
        update = new double[cells];
        right = new double[cells];
        stiffXX = new double[cells];
        stiffXY = new double[cells];
        stiffYY = new double[cells];
        mismatch = new double[cells];
        weights = new double[cells];
        partial = new double[24 * blocks];
        paddingJob = Pad;
        slopeJob = Slope;
        gradientJob = Gradient;
        mismatchJob = Mismatch;
        stiffnessJob = Stiffness;
        current = Potential;
    }

    public Grid Grid { get; }

    /// <summary>φ; start value on entry to <see cref="Run"/>.</summary>
    public double[] Potential { get; }

    /// <summary>∂φ/∂x at the last evaluation.</summary>
    public double[] GradientX { get; }

    /// <summary>∂φ/∂y at the last evaluation.</summary>
    public double[] GradientY { get; }

    /// <summary>a(y + ∇φ) det(I + D²φ) at the last evaluation: the density that y ↦ y + ∇φ carries exactly to a.</summary>
    public double[] Pulled { get; }

    /// <summary>Sums |pulled − b| over the cells: twice the mass that is not in its place.</summary>
    public double Residual { get; private set; }

    public int LinearIterations { get; private set; }

    public void SetDensities(double[] a, double[] b)
    {
        a.CopyTo(source, 0);
        b.CopyTo(target, 0);
        var largest = SpanKernels.MaxAbs(target);
        fade = Fade * largest + 1e-290;
        for (var row = 0; row < ny; row++)
            (openWest[row], openEast[row]) = (b[row * nx] < Open * largest, b[row * nx + nx - 1] < Open * largest);
        for (var i = 0; i < nx; i++)
            (openSouth[i], openNorth[i]) = (b[i] < Open * largest, b[(ny - 1) * nx + i] < Open * largest);
        for (var i = 0; i < a.Length; i++)
        {
            logSource[i] = Math.Log(Math.Max(a[i], Tiny));
            var relative = (b[i] - a[i]) / Math.Max(a[i], Tiny);
            logRatio[i] = Math.Abs(relative) < 0.5 ? LogOnePlus(relative) : Math.Log(Math.Max(b[i], Tiny)) - logSource[i];
        }
    }

    /// <summary>
    /// Improves the potential; returns the steps taken. Stops when the residual is below <paramref name="tolerance"/>, no longer falls, or the limit is reached.
    /// </summary>
    public int Run(double tolerance, int limit, CancellationToken cancellation = default)
    {
        Evaluate(Potential);
        var steps = 0;
        while (steps < limit && Residual > tolerance)
        {
            cancellation.ThrowIfCancellationRequested();
            var before = Residual;
            SolveForUpdate();
            steps++;
            var factor = 1.0;
            for (var attempt = 0; ; attempt++)
            {
                for (var i = 0; i < trial.Length; i++)
                    trial[i] = Potential[i] + factor * update[i];
                Evaluate(trial);
                if (Residual < before * (1 - 0.1 * factor) || attempt == 5)
                    break;
                factor *= 0.5;
            }

            if (!(Residual < before))
            {
                Evaluate(Potential);
                break;
            }

            trial.CopyTo(Potential, 0);
            if (Residual > 0.7 * before && before < 1e-6)
                break;
        }

        return steps;
    }

    /// <summary>Sets gradient, pulled density and residual for a potential.</summary>
    public void Evaluate(double[] potential)
    {
        current = potential;
        team.Run(blocks, paddingJob);
        PadRows();
        team.Run(blocks, slopeJob);
        team.Run(blocks, gradientJob);
        team.Run(blocks, mismatchJob);
        Residual = SumPartials(0) * widthX * widthY;
    }

    private double SumPartials(int kind)
    {
        var sum = 0.0;
        for (var i = 0; i < blocks; i++)
            sum += partial[24 * i + 8 * kind];
        return sum;
    }

    private void SolveForUpdate()
    {
        // Mean of R under b, so that the right side adds up to 0 without touching the tails.
        var mean = SumPartials(1) / SumPartials(2);
        for (var i = 0; i < right.Length; i++)
            right[i] = -weights[i] * (mismatch[i] - mean);
        var largest = SpanKernels.MaxAbs(target);
        for (var i = 0; i < target.Length; i++)
        {
            stiffXX[i] += Floor * largest;
            stiffYY[i] += Floor * largest;
        }

        team.Run(blocks, stiffnessJob);
        elliptic.Prepare();
        // Loosely: what is left out are roughnesses of the tails, where the equation says little.
        LinearIterations += elliptic.Solve(right, update, Math.Clamp(0.1 * Residual, 1e-7, 1e-3), 60);
    }

    private void Stiffness(int block)
    {
        var (scaleX, scaleY, scaleXY) = (0.5 / (widthX * widthX), 0.5 / (widthY * widthY), 0.125 / (widthX * widthY));
        for (var row = block * RowsPerBlock; row < Math.Min(ny, (block + 1) * RowsPerBlock); row++)
        {
            var (here, up) = (row * nx, (row + 1 < ny ? row + 1 : 0) * nx);
            var alongX = elliptic.RowX(row);
            var alongY = elliptic.RowY(row);
            var corner = elliptic.RowCorner(row);
            for (var i = 0; i < nx; i++)
            {
                var next = i + 1 < nx ? i + 1 : 0;
                alongX[i] = scaleX * (stiffXX[here + i] + stiffXX[here + next]);
                alongY[i] = scaleY * (stiffYY[here + i] + stiffYY[up + i]);
                corner[i] = scaleXY * (stiffXY[here + i] + stiffXY[here + next] + stiffXY[up + i] + stiffXY[up + next]);
            }
        }
    }

    // Copies φ into the padded field and fills the ghost columns: mirrored, wrapped, or run on by the parabola through three cells.
    private void Pad(int block)
    {
        for (var row = block * RowsPerBlock; row < Math.Min(ny, (block + 1) * RowsPerBlock); row++)
        {
            var line = padded.AsSpan((row + Ghosts) * stride, stride);
            current.AsSpan(row * nx, nx).CopyTo(line[Ghosts..]);
            if (Grid.X.IsPeriodic)
            {
                (line[0], line[1]) = (line[nx], line[nx + 1]);
                (line[nx + 2], line[nx + 3]) = (line[2], line[3]);
                continue;
            }

            (line[1], line[0]) = Beyond(line[2], line[3], line[4], openWest[row]);
            (line[nx + 2], line[nx + 3]) = Beyond(line[nx + 1], line[nx], line[nx - 1], openEast[row]);
        }
    }

    private void PadRows()
    {
        for (var i = 0; i < stride; i++)
        {
            if (Grid.Y!.IsPeriodic)
            {
                (padded[i], padded[stride + i]) = (padded[ny * stride + i], padded[(ny + 1) * stride + i]);
                (padded[(ny + 2) * stride + i], padded[(ny + 3) * stride + i]) = (padded[2 * stride + i], padded[3 * stride + i]);
                continue;
            }

            var column = Math.Clamp(i - Ghosts, 0, nx - 1);
            (padded[stride + i], padded[i]) =
                Beyond(padded[2 * stride + i], padded[3 * stride + i], padded[4 * stride + i], openSouth[column]);
            (padded[(ny + 2) * stride + i], padded[(ny + 3) * stride + i]) =
                Beyond(padded[(ny + 1) * stride + i], padded[ny * stride + i], padded[(ny - 1) * stride + i], openNorth[column]);
        }
    }

    private static (double First, double Second) Beyond(double v0, double v1, double v2, bool open)
        => open ? (v0 + (2 * (v0 - v1) - (v1 - v2)), v0 + (5 * (v0 - v1) - 3 * (v1 - v2))) : (v0, v1);

    // ∂φ/∂x, on the ghost rows too: the mixed derivative is the slope of this along y.
    private void Slope(int block)
    {
        var scale = 1 / (12 * widthX);
        var first = block == 0 ? 0 : block * RowsPerBlock + Ghosts;
        var last = block == blocks - 1 ? ny + 2 * Ghosts : (block + 1) * RowsPerBlock + Ghosts;
        for (var row = first; row < last; row++)
        {
            var line = padded.AsSpan(row * stride, stride);
            var target = slopes.AsSpan(row * nx, nx);
            for (var i = 0; i < target.Length; i++)
                target[i] = scale * (8 * (line[i + 3] - line[i + 1]) - (line[i + 4] - line[i]));
        }
    }

    private void Gradient(int block)
    {
        var scale = 1 / (12 * widthY);
        for (var row = block * RowsPerBlock; row < Math.Min(ny, (block + 1) * RowsPerBlock); row++)
        {
            slopes.AsSpan((row + Ghosts) * nx, nx).CopyTo(GradientX.AsSpan(row * nx));
            var target = GradientY.AsSpan(row * nx, nx);
            var corner = row * stride + Ghosts;
            for (var i = 0; i < target.Length; i++)
            {
                var at = corner + i;
                target[i] = scale * (8 * (padded[at + 3 * stride] - padded[at + stride]) - (padded[at + 4 * stride] - padded[at]));
            }
        }
    }

    private void Mismatch(int block)
    {
        var (scaleX, scaleY, mixed) = (1 / (12 * widthX * widthX), 1 / (12 * widthY * widthY), 1 / (12 * widthY));
        double difference = 0, weighted = 0, weight = 0;
        for (var row = block * RowsPerBlock; row < Math.Min(ny, (block + 1) * RowsPerBlock); row++)
        {
            for (var i = 0; i < nx; i++)
            {
                var cell = row * nx + i;
                var at = (row + Ghosts) * stride + Ghosts + i;
                var p = padded[at];
                var xx = scaleX * (16 * (padded[at - 1] - p + (padded[at + 1] - p)) - (padded[at - 2] - p + (padded[at + 2] - p)));
                var yy = scaleY * (16 * (padded[at - stride] - p + (padded[at + stride] - p))
                    - (padded[at - 2 * stride] - p + (padded[at + 2 * stride] - p)));
                var slope = row * nx + i;
                var xy = mixed * (8 * (slopes[slope + 3 * nx] - slopes[slope + nx]) - (slopes[slope + 4 * nx] - slopes[slope]));
                var change = xx + yy + xx * yy - xy * xy;
                double logDeterminant;
                double inverseXX, inverseXY, inverseYY;
                if (change > -0.9 && xx > -0.95 && yy > -0.95 && change < 1000)
                {
                    var inverse = 1 / (1 + change);
                    (inverseXX, inverseXY, inverseYY) = ((1 + yy) * inverse, -xy * inverse, (1 + xx) * inverse);
                    logDeterminant = LogOnePlus(change);
                }
                else
                {
                    logDeterminant = Clamped(1 + xx, xy, 1 + yy, out inverseXX, out inverseXY, out inverseYY);
                }

                var carried = LogSourceAhead(i, row, GradientX[cell] / widthX, GradientY[cell] / widthY);
                var b = target[cell];
                var r = logRatio[cell] - carried - logDeterminant;
                if (!double.IsFinite(r))
                    r = 0;
                mismatch[cell] = r;
                double pulled;
                if (Math.Abs(r) < 0.5 && b > 0)
                {
                    var relative = ExpMinusOne(-r);
                    pulled = b + b * relative;
                    difference += b * Math.Abs(relative);
                }
                else
                {
                    pulled = Math.Exp(Math.Min(logSource[cell] + carried + logDeterminant, 600));
                    difference += Math.Min(Math.Abs(pulled - b), b);
                }

                Pulled[cell] = pulled;
                var between = b * Math.Exp(-Math.Clamp(0.5 * r, -1, 40));
                var faded = between * (b / (b + fade));
                weights[cell] = faded;
                weighted += faded * r;
                weight += faded;
                stiffXX[cell] = faded * inverseXX;
                stiffXY[cell] = faded * inverseXY;
                stiffYY[cell] = faded * inverseYY;
            }
        }

        (partial[24 * block], partial[24 * block + 8], partial[24 * block + 16]) = (difference, weighted, weight);
    }

    // log a at the displaced point minus log a at the cell; u, v in cells.
    private double LogSourceAhead(int column, int row, double u, double v)
    {
        if (!(Math.Abs(u) < 1e6 && Math.Abs(v) < 1e6))
            return double.NaN;
        var here = logSource[row * nx + column];
        var (baseU, baseV) = ((int)Math.Floor(u), (int)Math.Floor(v));
        var (s, t) = (u - baseU, v - baseV);
        var a0 = -s * (s - 1) * (s - 2) / 6;
        var a1 = (s + 1) * (s - 1) * (s - 2) / 2;
        var a2 = -(s + 1) * s * (s - 2) / 2;
        var a3 = (s + 1) * s * (s - 1) / 6;
        var (x0, x1, x2, x3) = (Fold(column + baseU - 1, nx, Grid.X.IsPeriodic), Fold(column + baseU, nx, Grid.X.IsPeriodic),
            Fold(column + baseU + 1, nx, Grid.X.IsPeriodic), Fold(column + baseU + 2, nx, Grid.X.IsPeriodic));
        var sum = 0.0;
        for (var k = 0; k < 4; k++)
        {
            var w = k switch
            {
                0 => -t * (t - 1) * (t - 2) / 6,
                1 => (t + 1) * (t - 1) * (t - 2) / 2,
                2 => -(t + 1) * t * (t - 2) / 2,
                _ => (t + 1) * t * (t - 1) / 6,
            };
            var start = Fold(row + baseV - 1 + k, ny, Grid.Y!.IsPeriodic) * nx;
            sum += w * (a0 * (logSource[start + x0] - here) + a1 * (logSource[start + x1] - here)
                + a2 * (logSource[start + x2] - here) + a3 * (logSource[start + x3] - here));
        }

        return sum;
    }

    // log det and inverse with the eigenvalues held between two bounds: keeps the system positive where the tails of φ are rough.
    private static double Clamped(double xx, double xy, double yy, out double inverseXX, out double inverseXY, out double inverseYY)
    {
        var (middle, half) = (0.5 * (xx + yy), 0.5 * (xx - yy));
        var radius = Math.Sqrt(half * half + xy * xy);
        var (cos, sin) = radius > 0 ? (half / radius, xy / radius) : (1, 0);
        var upper = Math.Clamp(middle + radius, LeastEigenvalue, MostEigenvalue);
        var lower = Math.Clamp(middle - radius, LeastEigenvalue, MostEigenvalue);
        if (double.IsNaN(upper) || double.IsNaN(lower))
            (upper, lower, cos, sin) = (1, 1, 1, 0);
        var (mean, difference) = (0.5 * (1 / upper + 1 / lower), 0.5 * (1 / upper - 1 / lower));
        (inverseXX, inverseXY, inverseYY) = (mean + difference * cos, difference * sin, mean - difference * cos);
        return Math.Log(upper * lower);
    }

    private static int Fold(int index, int count, bool periodic)
    {
        if ((uint)index < (uint)count)
            return index;
        if (periodic)
        {
            var wrapped = index % count;
            return wrapped < 0 ? wrapped + count : wrapped;
        }

        var phase = index % (2 * count);
        if (phase < 0)
            phase += 2 * count;
        return phase < count ? phase : 2 * count - 1 - phase;
    }

    // log(1 + x) and e^x − 1 without loss for small x (W. Kahan's forms).
    private static double LogOnePlus(double x)
    {
        var y = 1 + x;
        return y == 1 ? x : Math.Log(y) * (x / (y - 1));
    }

    private static double ExpMinusOne(double x)
    {
        if (Math.Abs(x) < 1e-5)
            return x + 0.5 * x * x;
        var y = Math.Exp(x);
        return y == 1 ? x : y - 1 == -1 ? -1 : (y - 1) * (x / Math.Log(y));
    }
}
