using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Wasserstein-2 distance and optimal map between laws on a line, exact up to rounding.
/// </summary>
/// <remarks>
/// On a line W2 is the L2 distance of the quantile functions, W2² = ∫₀¹ (F⁻¹ − G⁻¹)² du (F. Santambrogio, Optimal Transport for Applied
/// Mathematicians, Birkhäuser 2015, section 2.2). A grid density is taken as constant in each cell, so that its quantile function is piecewise
/// linear, and n samples as steps of height 1/n; merging the breakpoints of both makes the integral a finite sum, without binning. Cumulative
/// masses are carried to 32 digits and differences are formed from the nearer breakpoint: distances of 1e-10 of the domain keep their relative
/// accuracy. Densities need not be normalised (they are compared as if they were); entries below 0, as rounding leaves them, count as 0.
/// Cost O(cells + samples), without allocation. The ends of the axis are walls here whatever the axis says; see <see cref="CircleTransport"/>.
/// </remarks>
public static class LineTransport
{
    /// <summary>W2 between two densities, on the same grid or on different ones, in units of length.</summary>
    /// <exception cref="ArgumentException">A density is two-dimensional, not a number, or without mass.</exception>
    public static double Distance(Density first, Density second)
    {
        var a = Cursor(first);
        var b = Cursor(second);
        var sink = new CostSink();
        QuantileMerge.Walk(ref a, ref b, ref sink);
        return Math.Sqrt(sink.Cost);
    }

    /// <summary>W2 between samples of equal weight and a density.</summary>
    /// <param name="samples">Positions in ascending order, at least one; they may lie outside the axis.</param>
    /// <param name="density">The density.</param>
    /// <exception cref="ArgumentException">The samples are empty, not finite or not ascending, or the density is not one of one dimension.</exception>
    public static double Distance(ReadOnlySpan<double> samples, Density density)
    {
        RequireAscending(samples);
        var a = new SampleQuantileCursor(samples, density is null ? 1 : density.Grid.X.Interval.Length);
        var b = Cursor(density!);
        var sink = new CostSink();
        QuantileMerge.Walk(ref a, ref b, ref sink);
        return Math.Sqrt(sink.Cost);
    }

    /// <summary>W2 between two sets of samples, each of equal weights; the sets may differ in size.</summary>
    /// <param name="first">Positions in ascending order, at least one.</param>
    /// <param name="second">Positions in ascending order, at least one.</param>
    /// <exception cref="ArgumentException">A set is empty, not finite or not ascending.</exception>
    public static double Distance(ReadOnlySpan<double> first, ReadOnlySpan<double> second)
    {
        RequireAscending(first);
        RequireAscending(second);
        var a = new SampleQuantileCursor(first, 1);
        var b = new SampleQuantileCursor(second, 1);
        var sink = new CostSink();
        QuantileMerge.Walk(ref a, ref b, ref sink);
        return Math.Sqrt(sink.Cost);
    }

    /// <summary>
    /// The optimal (monotone) map at the cell edges of the first grid: element i is where edge i goes. Length cells + 1. Where the first density
    /// is zero the image is the upper end of what the mass below maps to.
    /// </summary>
    public static double[] MapEdges(Density from, Density to)
    {
        ArgumentNullException.ThrowIfNull(from);
        var quantile = new QuantileFunction(to);
        var cumulative = new QuantileFunction(from);
        var images = new double[from.Grid.Nx + 1];
        for (var i = 0; i < images.Length; i++)
            images[i] = quantile.Position(cumulative.MassBelow(from.Grid.X.Edge(i)));
        return images;
    }

    /// <summary>
    /// The point of the shortest path between two densities (displacement interpolation; R. J. McCann, A convexity principle for interacting
    /// gases, Adv. Math. 128 (1997)), on the first density's grid.
    /// </summary>
    /// <param name="from">The density at fraction 0.</param>
    /// <param name="to">The density at fraction 1.</param>
    /// <param name="fraction">0 … 1.</param>
    /// <returns>Cell averages of the interpolated law, mass 1. Mass that leaves the first grid's axis is put in its end cells.</returns>
    public static Density Interpolate(Density from, Density to, double fraction)
    {
        ArgumentNullException.ThrowIfNull(from);
        Require.That(fraction is >= 0 and <= 1, $"fraction was {fraction}; it must be from 0 to 1.");
        var a = Cursor(from);
        var b = Cursor(to);
        var sink = new DepositSink(from.Grid.X, fraction);
        QuantileMerge.Walk(ref a, ref b, ref sink);
        return sink.Result(from.Grid);
    }

    internal static void RequireAscending(ReadOnlySpan<double> samples)
    {
        Require.That(samples.Length > 0, "The set of samples was empty; it must hold at least one.");
        var rising = true;
        for (var i = 1; i < samples.Length; i++)
            rising &= samples[i - 1] <= samples[i];
        Require.That(rising && double.IsFinite(samples[0]) && double.IsFinite(samples[^1]),
            "The samples were not finite and in ascending order; they must be both.");
    }

    internal static GridQuantileCursor Cursor(Density density, double shift = 0)
    {
        ArgumentNullException.ThrowIfNull(density);
        QuantileFunction.RequireLine(density.Grid);
        return new GridQuantileCursor(density.Values, density.Grid.X, shift);
    }
}
