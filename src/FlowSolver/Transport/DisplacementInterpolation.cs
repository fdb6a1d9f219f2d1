using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Densities on the way along an optimal map in the plane: each mass goes from x to x + s·(T(x) − x).
/// </summary>
/// <remarks>
/// R. McCann, <i>A convexity principle for interacting gases</i>, Adv. Math. 128 (1997) 153-179. Mass is carried by cells, never made or lost: (1 − s) of the picture is the first
/// density carried forward by s, the rest the second carried back by 1 − s, so that the ends are the two densities themselves. The result is not negative.
/// Cells that the map tears apart leave a gap, as the optimal path does. On a line use <see cref="LineTransport.Interpolate"/>.
/// </remarks>
public static class DisplacementInterpolation
{
    /// <summary>The density at parameter <paramref name="parameter"/>, of mass 1, on the transport's grid.</summary>
    /// <param name="transport">A solved transport problem.</param>
    /// <param name="parameter">s: 0 gives <see cref="PlaneTransportResult.From"/>, 1 gives <see cref="PlaneTransportResult.To"/>.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="parameter"/> is outside 0 … 1.</exception>
    public static Density At(PlaneTransportResult transport, double parameter, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(transport);
        ArgumentNullException.ThrowIfNull(team);
        if (!(parameter is >= 0 and <= 1))
            throw new ArgumentOutOfRangeException(nameof(parameter), FormattableString.Invariant($"parameter was {parameter}; it must be from 0 to 1."));
        if (parameter == 0)
            return transport.From;
        if (parameter == 1)
            return transport.To;
        var grid = transport.From.Grid;
        var cells = grid.CellCount;
        var scatter = new PlaneScatter(grid, team);
        var (forward, back) = (new double[cells], new double[cells]);
        scatter.Push(transport.From.Values, transport.DisplacementX, transport.DisplacementY, forward, parameter);

        // The way back is the minimiser of the transform of −f.
        var (negative, values, dx, dy) = (new double[cells], new double[cells], new double[cells], new double[cells]);
        for (var i = 0; i < cells; i++)
            negative[i] = -transport.Conjugate[i];
        new CTransform(grid, 1, team).ApplyBetweenCenters(negative, values, dx, dy, new int[cells]);
        scatter.Push(transport.To.Values, dx, dy, back, 1 - parameter);
        for (var i = 0; i < cells; i++)
            forward[i] = (1 - parameter) * forward[i] + parameter * back[i];
        return new Density(grid, forward);
    }
}
