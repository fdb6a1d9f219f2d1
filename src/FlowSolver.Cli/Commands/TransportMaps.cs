using FlowSolver.Foundation;
using FlowSolver.Reporting;
using FlowSolver.Studies;
using FlowSolver.Transport;

namespace FlowSolver.Cli.Commands;

/// <summary>The transport maps that a run in the plane draws.</summary>
internal static class TransportMaps
{
    /// <summary>The map from the first to the last density of the exact flow, or of the first method where the exact flow is not shown; none in one dimension.</summary>
    public static IReadOnlyList<TransportPicture> Of(ComparisonResult result, WorkerTeam team)
    {
        if (result.Grid.Dimension != 2)
            return [];
        var shown = result.Densities.Where(densities => densities.Densities.Count >= 2).OrderByDescending(densities => densities.Method == "exact").ToList();
        if (shown.Count == 0)
            return [];
        var history = shown[0];
        var last = history.Densities.Count - 1;
        var transport = PlaneTransport.Solve(history.Densities[0], history.Densities[last], new PlaneTransportOptions(), team);
        var end = result.Plan.ReportTimes[last];
        return
        [
            new TransportPicture(FormattableString.Invariant($"{history.Method}, t = 0 to t = {end}"), history.Method, 0, end, transport.From, transport.DisplacementX, transport.DisplacementY),
        ];
    }
}
