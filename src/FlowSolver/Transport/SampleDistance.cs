using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Transport;

/// <summary>Wasserstein-2 distance of samples to a density or to other samples, by the method that the axes call for.</summary>
public static class SampleDistance
{
    /// <summary>W2 with bounds, in units of length; on a line or a circle the three are equal. Null where no method serves the pair.</summary>
    /// <param name="x">First coordinates, in any order; on a periodic axis they are folded onto it.</param>
    /// <param name="y">Second coordinates; empty in one dimension.</param>
    /// <param name="density">The density.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <exception cref="ArgumentException">The samples are empty or not finite, or the dimensions disagree.</exception>
    public static TransportBracket? Between(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Density density, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(team);
        Require.Length(y.Length, density.Grid.Y is null ? 0 : x.Length);
        if (density.Grid.Dimension != 1)
            return PlaneTransport.BetweenSamples(x, y, density, team);
        var interval = density.Grid.X.Interval;
        var sorted = Ascending(x, interval);
        return TransportBracket.Exact(density.Grid.X.IsPeriodic
            ? CircleTransport.Distance(sorted, density)
            : LineTransport.Distance(sorted, density));
    }

    /// <summary>W2 between two sets of samples; as above.</summary>
    /// <param name="x">First coordinates of the first set.</param>
    /// <param name="y">Second coordinates of the first set; empty in one dimension.</param>
    /// <param name="otherX">First coordinates of the second set, which may differ in size.</param>
    /// <param name="otherY">Second coordinates of the second set; empty in one dimension.</param>
    /// <param name="domain">Tells which axes are circles.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <exception cref="ArgumentException">A set is empty or not finite, or the dimensions disagree.</exception>
    public static TransportBracket? Between(
        ReadOnlySpan<double> x, ReadOnlySpan<double> y, ReadOnlySpan<double> otherX, ReadOnlySpan<double> otherY, Domain domain, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(domain);
        ArgumentNullException.ThrowIfNull(team);
        Require.Length(y.Length, domain.Dimension == 1 ? 0 : x.Length);
        Require.Length(otherY.Length, domain.Dimension == 1 ? 0 : otherX.Length);
        if (domain.Dimension != 1)
            return null;
        var first = Ascending(x, domain.X);
        var second = Ascending(otherX, domain.X);
        return TransportBracket.Exact(domain.X.Ends == AxisEnds.Periodic
            ? CircleTransport.Distance(first, second, domain.X.Length)
            : LineTransport.Distance(first, second));
    }

    private static double[] Ascending(ReadOnlySpan<double> samples, Interval interval)
    {
        var sorted = samples.ToArray();
        if (interval.Ends == AxisEnds.Periodic)
        {
            for (var i = 0; i < sorted.Length; i++)
                sorted[i] = interval.Fold(sorted[i]);
        }

        Array.Sort(sorted);
        return sorted;
    }
}
