using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

public static partial class PlaneTransport
{
    // Of the density's own spread. A shift by this much is measured 1 % too long by the linearised distance.
    private const double FarShare = 0.2;

    /// <summary>W2 between samples in the plane and a density, with bounds, in units of length.</summary>
    /// <remarks>
    /// Samples are counted in the cells of the density's grid. <c>Distance</c> is the linearised distance of <see cref="PlaneSampleDistance"/> where
    /// it is at most a fifth of the density's spread √(variance of x + variance of y), as sampling noise and small biases are: the same number that noise floors are made
    /// of. Beyond, it is that of <see cref="Solve"/> between the counts and the density. The bounds are those of masses at the cell centres (a dual
    /// value; a plan), widened by how far the samples stand from the centres of their cells (root mean square, about √((hx² + hy²)/12)).
    /// </remarks>
    /// <param name="x">First coordinates. On a periodic axis they are folded onto it; beyond a wall they count in the nearest cell.</param>
    /// <param name="y">Second coordinates, of the same length.</param>
    /// <param name="density">A density on a plane grid.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <exception cref="ArgumentException">The samples are empty or not finite, or the density is not a plane one with mass.</exception>
    public static TransportBracket BetweenSamples(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Density density, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(team);
        Require.That(density.Grid.Dimension == 2, "The density was on a line; it must be on a plane grid.");
        var law = Checked(density);
        var counts = new double[law.Values.Length];
        var offset = CountSamples(x, y, law.Grid, counts);
        var linear = new PlaneSampleDistance(law, x.Length, team);
        var distance = linear.OfCounts(counts);
        SpanKernels.Scale(counts, 1 / (x.Length * law.Grid.CellVolume));
        if (distance > FarShare * linear.Spread)
        {
            var bracket = Solve(new Density(law.Grid, counts), law, new PlaneTransportOptions(), team).Bracket;
            return new TransportBracket(bracket.Distance, Math.Max(0, bracket.Low - offset), bracket.High + offset);
        }

        var (low, high) = linear.Bounds(counts);
        return new TransportBracket(distance, Math.Max(0, Math.Min(low - offset, distance)), Math.Max(high + offset, distance));
    }

    /// <summary>Adds up samples by cell; returns the root mean square of their distances to the centres of their cells.</summary>
    internal static double CountSamples(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Grid grid, double[] counts)
    {
        Require.That(x.Length > 0, "The list of samples was empty; it must hold at least one.");
        Require.Length(y.Length, x.Length);
        Array.Clear(counts);
        var (axisX, axisY) = (grid.X, grid.Y!);
        var squares = 0.0;
        for (var k = 0; k < x.Length; k++)
        {
            var (px, py) = (x[k], y[k]);
            if (!double.IsFinite(px) || !double.IsFinite(py))
                throw new ArgumentException(FormattableString.Invariant($"Sample {k} was ({px}, {py}); it must be finite."));
            if (axisX.IsPeriodic)
                px = axisX.Interval.Fold(px);
            if (axisY.IsPeriodic)
                py = axisY.Interval.Fold(py);
            var (i, j) = (axisX.CellOf(px), axisY.CellOf(py));
            counts[j * grid.Nx + i]++;
            var (u, v) = (px - axisX.Center(i), py - axisY.Center(j));
            squares += u * u + v * v;
        }

        return Math.Sqrt(squares / x.Length);
    }
}

/// <summary>
/// The linearised Wasserstein-2 distance between counts of samples by cell and a density: the length of the samples' mass defect in the negative
/// Sobolev norm with the density as weight.
/// </summary>
/// <remarks>
/// L² = ∫ w|∇p|² with −∇·(w∇p) = counts/(N·cell) − ρ and w = max(ρ, 1/(N·S²)), S the density's spread: W2 to first order in the defect (R. Peyre,
/// <i>Comparison between W2 distance and Ḣ⁻¹ norm</i>, ESAIM: COCV 24 (2018) 1489-1501). The floor, one sample on the area of the density, keeps a stray sample in a tail,
/// where ρ is nearly 0, at the price of a move by about S: S/√N. As a test statistic it is calibrated by simulation, so its p-value does not rest on the linearisation. Owns its memory; allocates nothing in <see cref="OfCounts"/>.
/// </remarks>
public sealed class PlaneSampleDistance
{
    private const double Tolerance = 1e-3;
    private readonly Density density;
    private readonly WorkerTeam team;
    private readonly double sampleDensity;
    private readonly PlaneElliptic elliptic;
    private readonly double[] right;
    private readonly double[] potential;

    /// <summary>Prepares the weight.</summary>
    /// <param name="density">A density of mass 1 on a plane grid.</param>
    /// <param name="sampleCount">N.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    public PlaneSampleDistance(Density density, int sampleCount, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(team);
        Require.That(density.Grid.Dimension == 2, "The density was on a line; it must be on a plane grid.");
        this.density = density;
        this.team = team;
        var grid = density.Grid;
        sampleDensity = 1 / (Require.AtLeast(sampleCount, 1) * grid.CellVolume);
        Spread = SpreadOf(density);
        var floor = 1 / (sampleCount * Math.Max(Spread * Spread, grid.CellVolume));
        elliptic = new PlaneElliptic(grid.Nx, grid.Ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic, grid.X.Width, grid.Y.Width, team);
        right = new double[grid.CellCount];
        potential = new double[grid.CellCount];
        var (scaleX, scaleY) = (0.5 / (grid.X.Width * grid.X.Width), 0.5 / (grid.Y.Width * grid.Y.Width));
        for (var row = 0; row < grid.Ny; row++)
        {
            var here = density.Values.AsSpan(row * grid.Nx, grid.Nx);
            var up = density.Values.AsSpan((row + 1) % grid.Ny * grid.Nx, grid.Nx);
            var faceX = elliptic.RowX(row);
            var faceY = elliptic.RowY(row);
            for (var i = 0; i < here.Length; i++)
            {
                var weight = Math.Max(here[i], floor);
                faceX[i] = scaleX * (weight + Math.Max(here[(i + 1) % here.Length], floor));
                faceY[i] = scaleY * (weight + Math.Max(up[i], floor));
            }
        }

        elliptic.Prepare();
    }

    /// <summary>√(variance of x + variance of y) of the density, in units of length.</summary>
    public double Spread { get; }

    /// <summary>L, in units of length.</summary>
    /// <param name="counts">Samples in each cell, x fastest, N in all; length the cell count.</param>
    public double OfCounts(ReadOnlySpan<double> counts)
    {
        Require.Length(counts.Length, right.Length);
        for (var i = 0; i < right.Length; i++)
            right[i] = counts[i] * sampleDensity - density.Values[i];
        elliptic.Solve(right, potential, Tolerance, 40);
        return Math.Sqrt(Math.Max(0, SpanKernels.Dot(potential, right) * density.Grid.CellVolume));
    }

    /// <summary>Bounds of W2 between masses at the cell centres, after <see cref="OfCounts"/> for the same samples, given as a density.</summary>
    internal (double Low, double High) Bounds(double[] samples)
    {
        var grid = density.Grid;
        var transform = new CTransform(grid, 1, team);
        var (f, dx, dy) = (new double[grid.CellCount], new double[grid.CellCount], new double[grid.CellCount]);
        var found = new int[grid.CellCount];
        var best = 0.0;
        var scaled = new double[grid.CellCount];
        var scatter = new PlaneScatter(grid, team);
        var rounding = new PlaneRounding(grid);
        var (from, to, arrived) = (new double[grid.CellCount], new double[grid.CellCount], new double[grid.CellCount]);
        var (momentX, momentY) = (new double[grid.CellCount], new double[grid.CellCount]);
        for (var i = 0; i < from.Length; i++)
            (from[i], to[i]) = (samples[i] * grid.CellVolume, density.Values[i] * grid.CellVolume);
        var cost = rounding.Settle(from, null, null, to);
        // The potential at a few sizes: sampling noise on the scale of a cell asks for less than the full one. Each size gives a dual value and a plan.
        foreach (var size in (ReadOnlySpan<double>)[1, 0.6, 0.3])
        {
            for (var i = 0; i < scaled.Length; i++)
                scaled[i] = size * potential[i];
            transform.ApplyBetweenCenters(scaled, f, dx, dy, found);
            double sum = 0, rest = 0;
            for (var i = 0; i < scaled.Length; i++)
            {
                sum += (from[i] - to[i]) * scaled[i];
                rest += from[i] * (f[i] - scaled[i]);
            }

            best = Math.Max(best, sum + rest);
            var plan = scatter.PushPlan(from, dx, dy, arrived, momentX, momentY);
            cost = Math.Min(cost, plan + rounding.Settle(arrived, momentX, momentY, to));
        }

        return (Math.Sqrt(2 * best), Math.Sqrt(Math.Max(0, cost)));
    }

    private static double SpreadOf(Density density)
    {
        var grid = density.Grid;
        double sx = 0, sy = 0, squares = 0, mass = 0;
        for (var i = 0; i < density.Values.Length; i++)
        {
            var (w, x, y) = (density.Values[i], grid.X.Center(i % grid.Nx), grid.Y!.Center(i / grid.Nx));
            mass += w;
            sx += w * x;
            sy += w * y;
            squares += w * (x * x + y * y);
        }

        return Math.Sqrt(Math.Max(0, squares / mass - (sx * sx + sy * sy) / (mass * mass)));
    }
}
