using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Transport;

/// <summary>
/// Sliced Wasserstein-2 distance in the plane: the root mean square, over directions, of the exact distance on the line between the projections.
/// </summary>
/// <remarks>
/// N. Bonneel, J. Rabin, G. Peyré, H. Pfister, <i>Sliced and Radon Wasserstein barycenters of measures</i>, J. Math. Imaging Vis. 51 (2015) 22-45. The directions are fixed:
/// θ_k = π(k + ½)/K, k = 0 … K − 1. SW2 ≤ W2/√2, with equality for a translation up to the choice of directions (the mean of cos²(θ − θ₀) over them is exactly ½ for K ≥ 2).
/// A density is taken as constant in cells; its projection is the exact one (a trapezoid for each cell), collected in bins a quarter of the smaller cell wide.
/// Walls only: on a circle a projection has no meaning.
/// </remarks>
public static class SlicedTransport
{
    /// <summary>Number of directions unless told otherwise.</summary>
    public const int DefaultDirections = 24;

    /// <summary>SW2 between two densities on one domain (the grids may differ), in units of length.</summary>
    /// <exception cref="ArgumentException">A grid is not plane or has a periodic axis, or a density has no mass.</exception>
    public static double Distance(Density first, Density second, WorkerTeam team, int directions = DefaultDirections)
    {
        RequirePlane(first);
        RequirePlane(second);
        return Average(directions, team, (cos, sin) => LineTransport.Distance(Project(first, cos, sin), Project(second, cos, sin)));
    }

    /// <summary>SW2 between samples and a density, in units of length.</summary>
    /// <exception cref="ArgumentException">The samples are empty or not finite, or the grid is not plane or has a periodic axis.</exception>
    public static double Distance(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Density density, WorkerTeam team, int directions = DefaultDirections)
    {
        RequirePlane(density);
        var (sx, sy) = Copy(x, y);
        return Average(directions, team, (cos, sin) => LineTransport.Distance(Project(sx, sy, cos, sin), Project(density, cos, sin)));
    }

    /// <summary>SW2 between two sets of samples, which may differ in size, in units of length.</summary>
    /// <exception cref="ArgumentException">A set is empty or not finite.</exception>
    public static double Distance(
        ReadOnlySpan<double> x, ReadOnlySpan<double> y, ReadOnlySpan<double> otherX, ReadOnlySpan<double> otherY, WorkerTeam team,
        int directions = DefaultDirections)
    {
        var (sx, sy) = Copy(x, y);
        var (tx, ty) = Copy(otherX, otherY);
        return Average(directions, team, (cos, sin) => LineTransport.Distance(Project(sx, sy, cos, sin), Project(tx, ty, cos, sin)));
    }

    private static double Average(int directions, WorkerTeam team, Func<double, double, double> distance)
    {
        ArgumentNullException.ThrowIfNull(team);
        Require.AtLeast(directions, 2);
        var squares = new double[directions];
        team.Run(directions, k =>
        {
            var (sin, cos) = Math.SinCos(Math.PI * (k + 0.5) / directions);
            var found = distance(cos, sin);
            squares[k] = found * found;
        });
        return Math.Sqrt(SpanKernels.Sum(squares) / directions);
    }

    private static (double[] X, double[] Y) Copy(ReadOnlySpan<double> x, ReadOnlySpan<double> y)
    {
        Require.That(x.Length > 0, "The list of samples was empty; it must hold at least one.");
        Require.Length(y.Length, x.Length);
        return (x.ToArray(), y.ToArray());
    }

    private static void RequirePlane(Density density)
    {
        ArgumentNullException.ThrowIfNull(density);
        Require.That(density.Grid.Y is { IsPeriodic: false } && !density.Grid.X.IsPeriodic,
            "The density was on a line or had a periodic axis; it must be on a plane grid with walls.");
    }

    private static double[] Project(double[] x, double[] y, double cos, double sin)
    {
        var along = new double[x.Length];
        for (var i = 0; i < along.Length; i++)
            along[i] = x[i] * cos + y[i] * sin;
        Array.Sort(along);
        return along;
    }

    private static Density Project(Density density, double cos, double sin)
    {
        var grid = density.Grid;
        var axisY = grid.Y!;
        // Half widths of the projected cell: a trapezoid with base longer + shorter and top longer − shorter on either side of the centre.
        var (halfX, halfY) = (0.5 * grid.X.Width * Math.Abs(cos), 0.5 * axisY.Width * Math.Abs(sin));
        var (longer, shorter) = (Math.Max(halfX, halfY), Math.Min(halfX, halfY));
        var reach = longer + shorter;
        var corners = (ReadOnlySpan<double>)
        [
            grid.X.Interval.From * cos + axisY.Interval.From * sin, grid.X.Interval.To * cos + axisY.Interval.From * sin,
            grid.X.Interval.From * cos + axisY.Interval.To * sin, grid.X.Interval.To * cos + axisY.Interval.To * sin,
        ];
        double from = double.PositiveInfinity, to = double.NegativeInfinity;
        foreach (var corner in corners)
            (from, to) = (Math.Min(from, corner), Math.Max(to, corner));
        var width = 0.25 * Math.Min(grid.X.Width, axisY.Width);
        var bins = Math.Max(4, (int)Math.Ceiling((to - from) / width));
        var axis = new Axis(new Interval(from, from + bins * width), bins);
        width = axis.Width;
        var masses = new double[bins];
        for (var row = 0; row < grid.Ny; row++)
        {
            for (var i = 0; i < grid.Nx; i++)
            {
                var value = density.Values[row * grid.Nx + i];
                if (value <= 0)
                    continue;
                var center = grid.X.Center(i) * cos + axisY.Center(row) * sin;
                var bin = Math.Clamp((int)((center - reach - from) / width), 0, bins - 1);
                var below = 0.0;
                for (; bin < bins && below < 1; bin++)
                {
                    var upTo = bin == bins - 1 ? 1 : MassBelow(from + (bin + 1) * width - center, longer, shorter);
                    masses[bin] += value * (upTo - below);
                    below = upTo;
                }
            }
        }

        return new Density(new Grid(axis), masses);
    }

    // Share of a unit trapezoid that lies below a distance from its centre.
    private static double MassBelow(double distance, double longer, double shorter)
    {
        if (distance <= -longer - shorter)
            return 0;
        if (distance >= longer + shorter)
            return 1;
        if (distance < 0)
            return 1 - MassBelow(-distance, longer, shorter);
        if (distance <= longer - shorter)
            return 0.5 + distance / (2 * longer);
        var left = longer + shorter - distance;
        return 1 - left * left / (8 * longer * shorter);
    }
}
