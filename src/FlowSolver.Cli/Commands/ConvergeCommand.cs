using System.CommandLine;
using System.Diagnostics;
using System.Security.Cryptography;
using System.Text;
using System.Text.Json;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;
using FlowSolver.Reporting.Reports;
using FlowSolver.Studies;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver converge</c>: convergence curves with observed orders.</summary>
internal static class ConvergeCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var path = SharedOptions.Case();
        var vary = new Option<string>("--vary")
        {
            Description = "What is refined: step (level 1 has the case's step, each further level half of it), cells (the last level has the case's cells, each level before it half on each axis), or both.",
            HelpName = "step|cells|both",
            Required = true,
        };
        var levels = new Option<int>("--levels") { Description = "Number of levels, 2 to 12. Default: 5.", HelpName = "K", DefaultValueFactory = _ => 5 };
        var target = SharedOptions.Out("results/<case file's name>-converge");
        var threads = SharedOptions.Threads();
        var overwrite = SharedOptions.Overwrite();
        var quiet = SharedOptions.Quiet();
        var command = new Command("converge", SharedOptions.WithExamples(
            "Convergence curves with observed orders for every flow method of the case. A stopped study goes on where it was when the same command is given again.",
            "flowsolver converge cases/harmonic-trap.toml --vary step --levels 5"))
        { path, vary, levels, target, threads, overwrite, quiet };
        command.SetAction(parsed => host.Guard(cancellation => Run(
            host, parsed.GetValue(path)!, parsed.GetValue(vary)!, parsed.GetValue(levels), parsed.GetValue(target),
            SharedOptions.ResolveThreads(parsed.GetValue(threads)), parsed.GetValue(overwrite), parsed.GetValue(quiet), cancellation)));
        return command;
    }

    private static int Run(
        CommandHost host, string path, string vary, int levels, string? target, int threads, bool overwrite, bool quiet, CancellationToken cancellation)
    {
        var variable = vary switch
        {
            "step" => ConvergenceVariable.Step,
            "cells" => ConvergenceVariable.Cells,
            "both" => ConvergenceVariable.Both,
            _ => throw new InputException($"--vary was \"{vary}\"; it must be step, cells or both."),
        };
        if (levels is < 2 or > 12)
            throw new InputException($"--levels was {levels}; it must be a whole number from 2 to 12.");
        var read = CaseFileReader.Read(path);
        var directory = target ?? Path.Combine("results", read.Name + "-converge");
        ResultDirectory.Check(directory, overwrite);
        var journal = new Journal(directory, $"{read.ResolvedText}\n{variable} {levels} {Provenance.Version}");
        var known = journal.Load();
        if (known.Count > 0)
            host.Error.WriteLine($"note: going on with a stopped study; {known.Count} of its pieces are done.");
        var clock = Stopwatch.StartNew();
        var schemes = read.Methods.Select(name => CaseMethods.Scheme(name, read)).ToList();
        ConvergenceResult result;
        using (var team = new WorkerTeam(threads))
        using (var line = new ProgressLine(quiet))
        {
            var done = known.Count;
            line.Show(done, schemes.Count * levels, "reference");
            result = Convergence.Run(read.Problem, read.Grid, read.Plan, schemes, variable, levels, team, known, piece =>
            {
                journal.Add(piece);
                line.Show(++done, schemes.Count * levels, $"{piece.Method}, level {piece.Level}");
            }, cancellation);
        }

        var provenance = Provenance.Of(read, "converge", null, read.Warnings, [.. schemes.Select(scheme => scheme.Traits.Source)],
            new Dictionary<string, double> { ["computing"] = clock.Elapsed.TotalSeconds });
        var report = ConvergenceReport.Of(result, read.Labels, provenance, read.Title.Length > 0 ? read.Title : read.Name, read.Plan.ReportTimes[^1]);
        var status = StudyRunner.Finish(host, report, directory, ConvergenceReport.Orders(result, read.Labels));
        if (!result.Interrupted)
            journal.Remove();
        return status;
    }

    /// <summary>Finished pieces of a study, one JSON line each in a file beside the result, so that even a killed study loses only what it was working on.</summary>
    private sealed class Journal(string directory, string study)
    {
        private readonly string path = Path.GetFullPath(directory).TrimEnd(Path.DirectorySeparatorChar) + ".unfinished";
        private readonly string mark = Convert.ToHexString(SHA256.HashData(Encoding.UTF8.GetBytes(study)))[..16];

        public List<ConvergencePiece> Load()
        {
            var pieces = new List<ConvergencePiece>();
            if (!File.Exists(path))
                return pieces;
            foreach (var line in File.ReadLines(path).Where(line => line.StartsWith(mark, StringComparison.Ordinal)))
            {
                try
                {
                    if (JsonSerializer.Deserialize<ConvergencePiece>(line[mark.Length..]) is { } piece)
                        pieces.Add(piece);
                }
                catch (JsonException)
                {
                    // A line that a kill cut short: its piece is computed again.
                }
            }

            return pieces;
        }

        public void Add(ConvergencePiece piece)
        {
            Directory.CreateDirectory(Path.GetDirectoryName(path)!);
            File.AppendAllText(path, $"{mark}{JsonSerializer.Serialize(piece)}\n");
        }

        public void Remove() => File.Delete(path);
    }
}
