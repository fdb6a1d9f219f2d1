using FlowSolver.Foundation;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// From parcels to cells: cumulative mass is interpolated inside each parcel by the monotone rational quadratic of <see cref="EquilibriumProfile"/> in the
/// share of the equilibrium's mass, so that each parcel's mass is divided among its cells without loss and an equilibrium comes out as itself.
/// </summary>
internal static class QuantileTransfer
{
    private const double LargestEdgeLog = 3;

    /// <summary>Writes the density as cell averages of mass 1.</summary>
    /// <param name="solver">Holds the parcels.</param>
    /// <param name="profile">The equilibrium between the cells.</param>
    /// <param name="positions">Scratch: receives the node positions; length the number of parcels.</param>
    /// <param name="destination">Receives the density; length the number of cells.</param>
    public static void WriteDensity(QuantileNewton solver, EquilibriumProfile profile, Span<double> positions, Span<double> destination)
    {
        destination.Clear();
        solver.WritePositions(positions);
        var mass = solver.Mass;
        for (var lane = 0; lane < QuantileNewton.Lanes; lane++)
        {
            for (var row = 0; row < solver.Rows; row++)
            {
                var at = row * QuantileNewton.Lanes + lane;
                var (from, to) = (positions[at], UpperPosition(solver, positions, row, lane));
                var (first, last) = (profile.CellOf(from), profile.CellOf(to));
                if (last <= first)
                    destination[profile.Wrap(first)] += mass[at];
                else
                    Divide(solver, profile, positions, row, lane, first, last, destination);
            }
        }

        var scale = 1 / (SpanKernels.Sum(destination) * profile.Axis.Width);
        SpanKernels.Scale(destination, scale);
    }

    private static double UpperPosition(QuantileNewton solver, ReadOnlySpan<double> positions, int row, int lane)
        => row == solver.Rows - 1 ? solver.Ends[lane + 1] : positions[(row + 1) * QuantileNewton.Lanes + lane];

    private static void Divide(
        QuantileNewton solver, EquilibriumProfile profile, ReadOnlySpan<double> positions, int row, int lane, int first, int last, Span<double> destination)
    {
        var at = row * QuantileNewton.Lanes + lane;
        var mass = solver.Mass[at];
        var width = solver.Gap[at];
        var here = LogRatio(solver, profile, positions, row, lane);
        var left = EdgeRatio(here, width, Neighbour(solver, profile, positions, row, lane, -1));
        var right = EdgeRatio(here, width, Neighbour(solver, profile, positions, row, lane, 1));

        var cellWidth = profile.Axis.Width;
        var s = positions[at] / cellWidth - first;
        var t = UpperPosition(solver, positions, row, lane) / cellWidth - last;
        var (total, level, _, _) = profile.MassAcross(first, s, last, t, width);
        var adjacent = last == first + 1;
        var below = adjacent ? Math.Clamp((1 - s) * cellWidth, 0, width) : (1 - s) * cellWidth;
        var place = 0.0;
        for (var cell = first; cell <= last; cell++)
        {
            var entry = EquilibriumProfile.Stride * profile.Wrap(cell);
            var part = cell == first ? cellWidth * profile.ShareOf(entry, s, 1, below / cellWidth)
                : cell < last ? cellWidth
                : cellWidth * profile.ShareOf(entry, 0, t, adjacent ? (width - below) / cellWidth : t);
            part *= Math.Exp(profile.Table[entry + 2] - level) / total;
            destination[profile.Wrap(cell)] += mass * EquilibriumProfile.RationalShare(left, right, place, Math.Min(place + part, 1), part);
            place = Math.Min(place + part, 1);
        }
    }

    // log of the parcel's mass over the equilibrium's.
    private static double LogRatio(QuantileNewton solver, EquilibriumProfile profile, ReadOnlySpan<double> positions, int row, int lane)
    {
        var at = row * QuantileNewton.Lanes + lane;
        var (from, to) = (positions[at], UpperPosition(solver, positions, row, lane));
        var (first, last) = (profile.CellOf(from), profile.CellOf(to));
        var s = from / profile.Axis.Width - first;
        var width = solver.Gap[at];
        if (last <= first)
        {
            var entry = EquilibriumProfile.Stride * profile.Wrap(first);
            var scaled = width / profile.Axis.Width;
            var share = profile.ShareOf(entry, s, s + scaled, scaled) * profile.Axis.Width;
            return Math.Log(solver.Mass[at] / share) - profile.Table[entry + 2];
        }

        var (mass, level, _, _) = profile.MassAcross(first, s, last, to / profile.Axis.Width - last, width);
        return Math.Log(solver.Mass[at] / mass) - level;
    }

    private static (double LogRatio, double Width)? Neighbour(
        QuantileNewton solver, EquilibriumProfile profile, ReadOnlySpan<double> positions, int row, int lane, int direction)
    {
        row += direction;
        if (row < 0 || row >= solver.Rows)
        {
            row = direction < 0 ? solver.Rows - 1 : 0;
            lane += direction;
            if (lane < 0 || lane >= QuantileNewton.Lanes)
            {
                if (!profile.Axis.IsPeriodic)
                    return null;
                // The neighbour one turn on: its ratio is all that counts.
                lane = direction < 0 ? QuantileNewton.Lanes - 1 : 0;
            }
        }

        return (LogRatio(solver, profile, positions, row, lane), solver.Gap[row * QuantileNewton.Lanes + lane]);
    }

    // The ratio at the edge towards a neighbour over the parcel's mean ratio, exact for an exponential.
    private static double EdgeRatio(double here, double width, (double LogRatio, double Width)? neighbour)
    {
        if (neighbour is not { } other)
            return 1;
        var slope = (other.LogRatio - here) / (0.5 * (width + other.Width));
        var fromHere = 0.5 * slope * width - EquilibriumProfile.LogSinhRatio(0.5 * slope * width);
        var fromThere = other.LogRatio - here - 0.5 * slope * other.Width - EquilibriumProfile.LogSinhRatio(0.5 * slope * other.Width);
        return Math.Exp(Math.Clamp(0.5 * (fromHere + fromThere), -LargestEdgeLog, LargestEdgeLog));
    }
}
