using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;
using PureHDF;
using PureHDF.Selections;

namespace FlowSolver.Reporting.Archives;

/// <summary>
/// <c>density.h5</c> (HDF5): datasets <c>x</c>, <c>y</c> (two dimensions), <c>time</c>, one dataset a flow method of shape [time, y, x] or
/// [time, x], and <c>equilibrium</c> of shape [y, x] or [x]. Cell averages. A method that stopped early has fewer times; its first ones are
/// those of <c>time</c>.
/// </summary>
public static class DensityArchive
{
    /// <summary>Writes the file and returns its path. One report time is written after the other: nothing is copied as a whole.</summary>
    /// <exception cref="ArgumentException">A density is not finite.</exception>
    public static string Write(ComparisonResult result, string directory, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(directory);
        var path = Path.Combine(directory, "density.h5");
        var grid = result.Grid;
        var reports = RunTables.ReachedReports(result);
        RunTables.CheckFinite(result.Equilibrium, "equilibrium", null);
        ulong[] cells = grid.Y is null ? [(ulong)grid.Nx] : [(ulong)grid.Ny, (ulong)grid.Nx];
        var file = new H5File
        {
            ["x"] = grid.X.Centers(),
            ["time"] = result.Plan.ReportTimes.Take(reports).ToArray(),
            ["equilibrium"] = new H5Dataset(result.Equilibrium.Values, fileDims: cells),
        };
        if (grid.Y is not null)
            file["y"] = grid.Y.Centers();
        var targets = new List<(DensityHistory History, H5Dataset<double[]> Dataset)>();
        foreach (var history in result.Densities.Where(history => history.Densities.Count > 0))
        {
            var dataset = new H5Dataset<double[]>([(ulong)history.Densities.Count, .. cells]);
            file[history.Method] = dataset;
            targets.Add((history, dataset));
        }

        using var writer = file.BeginWrite(path);
        foreach (var (history, dataset) in targets)
        {
            for (var report = 0; report < history.Densities.Count; report++)
            {
                cancellation.ThrowIfCancellationRequested();
                var density = history.Densities[report];
                RunTables.CheckFinite(density, history.Method, result.Plan.ReportTimes[report]);
                ulong[] starts = [(ulong)report, .. cells.Select(_ => 0UL)];
                writer.Write(dataset, density.Values, fileSelection: new HyperslabSelection(starts.Length, starts, [1, .. cells]));
            }
        }

        return path;
    }
}
