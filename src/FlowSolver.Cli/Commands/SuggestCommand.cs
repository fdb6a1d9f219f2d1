using System.CommandLine;
using System.Diagnostics;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;
using FlowSolver.Reporting.Reports;
using FlowSolver.Studies;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver suggest</c>: the largest step whose bias stays under a bound.</summary>
internal static class SuggestCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var path = SharedOptions.Case();
        var bias = new Option<double>("--bias") { Description = "Largest bias in W2, in units of length.", HelpName = "X", Required = true };
        var aim = new Option<double?>("--aim") { Description = "W2 to equilibrium up to which steps and gradient evaluations are counted. Default: twice the bias.", HelpName = "E" };
        var methods = new Option<string[]>("--methods")
        {
            Description = "Methods to look at: splitting schemes and samplers with a law on the grid. Default: all of them.",
            HelpName = "NAME",
            AllowMultipleArgumentsPerToken = true,
        };
        var target = SharedOptions.Out("results/<case file's name>-suggest");
        var threads = SharedOptions.Threads();
        var overwrite = SharedOptions.Overwrite();
        var quiet = SharedOptions.Quiet();
        var command = new Command("suggest", SharedOptions.WithExamples(
            "The largest step whose stationary and transient bias stay under X for each splitting method and sampler, found by following the law itself, with the stability limit and what changes at half and double the step.",
            "flowsolver suggest cases/harmonic-trap.toml --bias 0.01 --methods ula proximal-ula"))
        { path, bias, aim, methods, target, threads, overwrite, quiet };
        command.SetAction(parsed => host.Guard(cancellation => Run(
            host, parsed.GetValue(path)!, parsed.GetValue(bias), parsed.GetValue(aim), parsed.GetValue(methods) ?? [], parsed.GetValue(target),
            SharedOptions.ResolveThreads(parsed.GetValue(threads)), parsed.GetValue(overwrite), parsed.GetValue(quiet), cancellation)));
        return command;
    }

    private static int Run(
        CommandHost host, string path, double bias, double? aim, string[] methods, string? target, int threads, bool overwrite, bool quiet, CancellationToken cancellation)
    {
        if (!(double.IsFinite(bias) && bias > 0))
            throw new InputException(FormattableString.Invariant($"--bias was {bias}; it must be a number above 0."));
        if (aim is { } given && !(double.IsFinite(given) && given > 0))
            throw new InputException(FormattableString.Invariant($"--aim was {given}; it must be a number above 0."));
        var read = CaseFileReader.Read(path);
        var directory = target ?? Path.Combine("results", read.Name + "-suggest");
        ResultDirectory.Check(directory, overwrite);
        var clock = Stopwatch.StartNew();
        StepSuggestionResult result;
        using (var team = new WorkerTeam(threads))
        using (var line = new ProgressLine(quiet))
        {
            line.Show(0, 1, "looking for steps");
            result = StepSuggestion.Search(read.Problem, read.Grid, read.Plan, bias, team, methods.Length > 0 ? methods : null, aim,
                new Share(share => line.Show(share, 1, "looking for steps")), cancellation);
        }

        var provenance = Provenance.Of(read, "suggest", null, read.Warnings, [], new Dictionary<string, double> { ["computing"] = clock.Elapsed.TotalSeconds });
        return StudyRunner.Finish(host, SuggestReport.Of(result, read.Labels, provenance, read.Title.Length > 0 ? read.Title : read.Name), directory, SuggestReport.Rows(result, read.Labels));
    }

    private sealed class Share(Action<double> show) : IProgress<double>
    {
        public void Report(double value) => show(value);
    }
}
