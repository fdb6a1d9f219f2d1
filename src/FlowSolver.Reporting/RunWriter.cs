using FlowSolver.Reporting.Archives;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Reports;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting;

/// <summary>What was written.</summary>
/// <param name="Files">Paths of all files, tables first.</param>
/// <param name="Problems">Outputs that this machine could not make (such as pictures without a font library), one sentence each.</param>
public sealed record WrittenRun(IReadOnlyList<string> Files, IReadOnlyList<string> Problems);

/// <summary>Everything that a run leaves: tables, densities, figures, <c>run.json</c> and the page.</summary>
public static class RunWriter
{
    /// <summary>
    /// Writes all files into a folder, which must exist. The caller sees to it that a half-written folder never looks whole, by writing into a
    /// sibling and renaming it.
    /// </summary>
    /// <param name="result">What the run found.</param>
    /// <param name="labels">Units for axes and headings.</param>
    /// <param name="provenance">Where it came from.</param>
    /// <param name="directory">The folder.</param>
    /// <param name="maps">2-D transport maps to draw; none by default.</param>
    /// <param name="style">Looks of the figures; null takes the default.</param>
    /// <param name="formats">Formats of the figures. PDF is left out unless asked for: each carries its whole font.</param>
    /// <param name="cancellation">Checked between files and inside the long ones.</param>
    /// <exception cref="ArgumentException">A number in the records is NaN or infinite.</exception>
    /// <exception cref="OperationCanceledException">Cancelled; the folder then holds a part.</exception>
    public static WrittenRun WriteAll(
        ComparisonResult result, CaseLabels labels, RunProvenance provenance, string directory,
        IReadOnlyList<TransportPicture>? maps = null, FigureStyle? style = null, FigureFormats formats = FigureFormats.Svg | FigureFormats.Png, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        ArgumentNullException.ThrowIfNull(directory);
        var files = new List<string>();
        using var writer = new FigureWriter(style);
        // Pictures take most of the time: they are drawn beside everything else.
        var drawing = Task.Run(() => WriteFigures(result, labels, maps, style, formats, writer, Path.Combine(directory, "figures"), cancellation), cancellation);
        try
        {
            foreach (var table in (Table[])[RunTables.Series(result, labels), RunTables.Steps(result, labels), RunTables.Budget(result, labels)])
            {
                cancellation.ThrowIfCancellationRequested();
                files.Add(TableWriter.WriteCsv(table, directory));
            }

            if (result.Bounds.Count > 0)
                files.Add(TableWriter.WriteCsv(BoundsReport.Rows(result, labels), directory));
            if (result.Grid.Dimension == 1)
                files.Add(RunTables.WriteDensityCsv(result, directory, cancellation));
            files.Add(DensityArchive.Write(result, directory, cancellation));
            cancellation.ThrowIfCancellationRequested();
            var problem = writer.Problem;
            WriteWords(problem);
            files.AddRange(drawing.GetAwaiter().GetResult());
            if (writer.Problem != problem)
                WriteWords(writer.Problem);
            files.Add(Path.Combine(directory, "run.json"));
            files.Add(Path.Combine(directory, "report.html"));
            return new WrittenRun(files, Listed(writer.Problem));
        }
        finally
        {
            // Nobody draws into the folder after this method has returned or thrown; a fault of the drawing itself was rethrown above.
            ((IAsyncResult)drawing).AsyncWaitHandle.WaitOne();
        }

        void WriteWords(string? problem)
        {
            RunRecord.Write(result, labels, provenance, directory, Listed(problem));
            cancellation.ThrowIfCancellationRequested();
            PageWriter.Write(RunPage.Model(result, labels, provenance, maps, style, Listed(problem)), directory);
        }

        static IReadOnlyList<string> Listed(string? problem) => problem is null ? [] : [problem];
    }

    private static List<string> WriteFigures(
        ComparisonResult result, CaseLabels labels, IReadOnlyList<TransportPicture>? maps, FigureStyle? style, FigureFormats formats,
        FigureWriter writer, string directory, CancellationToken cancellation)
    {
        var files = new List<string>();
        foreach (var figure in RunFigures.All(result, labels, maps, style))
        {
            cancellation.ThrowIfCancellationRequested();
            files.AddRange(writer.Write(figure, directory, formats));
        }

        return files;
    }
}
