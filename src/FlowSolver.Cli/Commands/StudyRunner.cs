using FlowSolver.Reporting;
using FlowSolver.Reporting.Reports;
using FlowSolver.Reporting.Tables;

namespace FlowSolver.Cli.Commands;

/// <summary>What every study command does at its end: writes the report into place, prints the table and the remarks, and picks the exit status.</summary>
internal static class StudyRunner
{
    /// <summary>Writes and prints.</summary>
    /// <param name="host">Writers.</param>
    /// <param name="report">The report.</param>
    /// <param name="directory">Where to.</param>
    /// <param name="printed">The table that goes to standard output, as CSV, the same as in the file.</param>
    /// <returns>The exit status.</returns>
    public static int Finish(CommandHost host, StudyReport report, string directory, Table printed)
    {
        var place = report.Interrupted ? directory.TrimEnd(Path.DirectorySeparatorChar) + ".interrupted" : directory;
        if (report.Interrupted && Directory.Exists(place))
            Directory.Delete(place, recursive: true);
        WrittenRun written;
        using (var results = ResultDirectory.Begin(place))
        {
            written = StudyWriter.Write(report, results.WorkingPath);
            results.Commit();
        }

        host.Output.Write(TableWriter.Csv(printed));
        host.Error.WriteLine(report.Page.Verdict.Headline);
        foreach (var sentence in written.Problems.Concat(report.Provenance.Warnings))
            host.Error.WriteLine($"note: {sentence}");
        host.Error.WriteLine($"{(report.Interrupted ? "Interrupted; what was finished is in" : "Written to")} {place}. Open {Path.Combine(place, "report.html")} in a browser.");
        return report.Interrupted ? ExitStatus.Interrupted : report.Failed ? ExitStatus.NotTrusted : ExitStatus.Done;
    }
}
