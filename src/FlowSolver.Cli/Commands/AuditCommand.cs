using System.CommandLine;
using System.Diagnostics;
using System.Globalization;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;
using FlowSolver.Reporting.Reports;
using FlowSolver.Reporting.Samples;
using FlowSolver.Studies;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver audit</c>: holds someone else's samples against the case's law.</summary>
internal static class AuditCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var path = SharedOptions.Case();
        var samples = new Option<string[]>("--samples")
        {
            Description = "Samples: CSV with a header x[,y][,time], .npy, or HDF5. Give it several times for several files, each with its --time.",
            HelpName = "FILE",
            Required = true,
        };
        var time = new Option<string[]>("--time")
        {
            Description = "Time whose law the samples claim, one for each --samples; \"equilibrium\" for π. Default: the file's time column, or equilibrium where it has none.",
            HelpName = "T",
        };
        var chain = new Option<bool>("--chain") { Description = "The rows are one long chain in order, not independent walkers." };
        var level = new Option<double>("--level") { Description = "p-value below which samples differ, shared among several sets by Holm's rule. Default: 0.05.", HelpName = "P", DefaultValueFactory = _ => 0.05 };
        var target = SharedOptions.Out("results/<case file's name>-audit");
        var threads = SharedOptions.Threads();
        var overwrite = SharedOptions.Overwrite();
        var quiet = SharedOptions.Quiet();
        var command = new Command("audit", SharedOptions.WithExamples(
            "Holds samples of any sampler against the case's law: distance, noise floor, p-value, verdict, and the likely cause. Exit status 4 when they differ.",
            "flowsolver audit cases/two-well-trap.toml --samples walkers.csv --time 2"))
        { path, samples, time, chain, level, target, threads, overwrite, quiet };
        command.SetAction(parsed => host.Guard(cancellation => Run(
            host, parsed.GetValue(path)!, parsed.GetValue(samples) ?? [], parsed.GetValue(time) ?? [], parsed.GetValue(chain), parsed.GetValue(level), parsed.GetValue(target),
            SharedOptions.ResolveThreads(parsed.GetValue(threads)), parsed.GetValue(overwrite), parsed.GetValue(quiet), cancellation)));
        return command;
    }

    private static int Run(
        CommandHost host, string path, string[] files, string[] times, bool isChain, double level, string? target, int threads, bool overwrite, bool quiet, CancellationToken cancellation)
    {
        if (!(level is > 0 and < 1))
            throw new InputException(FormattableString.Invariant($"--level was {level}; it must be above 0 and below 1."));
        if (times.Length > 0 && times.Length != files.Length)
            throw new InputException($"There were {files.Length} --samples and {times.Length} --time; give one --time for each --samples, or none at all.");
        var read = CaseFileReader.Read(path);
        var directory = target ?? Path.Combine("results", read.Name + "-audit");
        ResultDirectory.Check(directory, overwrite);
        var clock = Stopwatch.StartNew();
        var sets = new List<AuditSamples>();
        for (var i = 0; i < files.Length; i++)
            sets.AddRange(Sets(files[i], times.Length > 0 ? times[i] : null, read));
        IReadOnlyList<AuditRow> rows;
        using (var team = new WorkerTeam(threads))
        using (var line = new ProgressLine(quiet))
        {
            line.Show(0, sets.Count, "audit");
            rows = SamplerAudit.Run(read.Problem, read.Grid, read.Plan, sets, new AuditOptions { IsChain = isChain, Level = level, Seed = read.Seed }, team,
                new Counter(done => line.Show(done, sets.Count, "audit")), cancellation);
        }

        var provenance = Provenance.Of(read, "audit", null, read.Warnings, ["Phipson, Smyth 2010 (p-values by simulation); Sokal 1997 (autocorrelation window); Holm 1979 (several sets)"],
            new Dictionary<string, double> { ["computing"] = clock.Elapsed.TotalSeconds });
        var status = StudyRunner.Finish(host, AuditReport.Of(rows, read.Labels, provenance, read.Title.Length > 0 ? read.Title : read.Name), directory, AuditReport.Rows(rows, read.Labels));
        return status == ExitStatus.Done && rows.Any(row => row.Verdict == "differs") ? ExitStatus.Differs : status;
    }

    private static IEnumerable<AuditSamples> Sets(string file, string? asked, CaseFile read)
    {
        var found = SamplesReader.Read(file, read.Problem.Dimension);
        var name = Path.GetFileName(file);
        if (asked is not null)
        {
            double? time = null;
            if (asked != "equilibrium")
            {
                if (!double.TryParse(asked, NumberStyles.Float, CultureInfo.InvariantCulture, out var value) || !double.IsFinite(value) || value < 0)
                    throw new InputException($"--time was \"{asked}\"; it must be a number not below 0, or equilibrium.");
                time = value;
            }

            yield return new AuditSamples(name, time, found.X, found.Y);
            yield break;
        }

        if (found.Time is null)
        {
            yield return new AuditSamples(name, null, found.X, found.Y);
            yield break;
        }

        foreach (var group in Enumerable.Range(0, found.Count).GroupBy(row => found.Time[row]).OrderBy(group => group.Key))
        {
            if (group.Key < 0)
                throw new InputException(new InputFault(FormattableString.Invariant($"The time column held {group.Key}; times must not be below 0."), File: file));
            var rows = group.ToArray();
            yield return new AuditSamples(FormattableString.Invariant($"{name}, t = {group.Key}"), group.Key, Array.ConvertAll(rows, row => found.X[row]), found.Y is null ? null : Array.ConvertAll(rows, row => found.Y[row]));
        }
    }

    private sealed class Counter(Action<int> show) : IProgress<int>
    {
        public void Report(int value) => show(value);
    }
}
