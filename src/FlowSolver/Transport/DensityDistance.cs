using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>Wasserstein-2 distance between two densities, by the method that their axes call for.</summary>
public static class DensityDistance
{
    /// <summary>W2 with bounds, in units of length; on a line or a circle the three are equal. Null where no method serves the pair.</summary>
    /// <param name="first">A density.</param>
    /// <param name="second">A density on the same domain; the cells may differ in one dimension.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <exception cref="ArgumentException">The domains differ, or a density is not a number or without mass.</exception>
    public static TransportBracket? Between(Density first, Density second, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(first);
        ArgumentNullException.ThrowIfNull(second);
        ArgumentNullException.ThrowIfNull(team);
        Require.That(first.Grid.X.Interval == second.Grid.X.Interval && first.Grid.Y?.Interval == second.Grid.Y?.Interval,
            "The two densities were on different domains; they must be on the same.");
        if (first.Grid.Dimension != 1)
            return PlaneTransport.Between(first, second, team);
        return TransportBracket.Exact(
            first.Grid.X.IsPeriodic ? CircleTransport.Distance(first, second) : LineTransport.Distance(first, second));
    }
}
