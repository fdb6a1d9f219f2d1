using System.CommandLine;
using System.Diagnostics;
using System.Globalization;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Reporting;
using FlowSolver.Studies;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver run</c>: the main job.</summary>
internal static class RunCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var path = SharedOptions.Case();
        var target = SharedOptions.Out("results/<case file's name>");
        var seed = SharedOptions.Seed();
        var threads = SharedOptions.Threads();
        var overwrite = SharedOptions.Overwrite();
        var quiet = SharedOptions.Quiet();
        var command = new Command("run", SharedOptions.WithExamples(
            "The main job: advances the density by every method of the case, runs the ensembles, compares them, and writes tables, figures and the page.",
            "flowsolver run cases/two-well-trap.toml --overwrite"))
        { path, target, seed, threads, overwrite, quiet };
        command.SetAction(parsed => host.Guard(cancellation => Run(
            host, parsed.GetValue(path)!, parsed.GetValue(target), parsed.GetValue(seed),
            SharedOptions.ResolveThreads(parsed.GetValue(threads)), parsed.GetValue(overwrite), parsed.GetValue(quiet), cancellation)));
        return command;
    }

    private static int Run(
        CommandHost host, string path, string? target, ulong? seed, int threads, bool overwrite, bool quiet, CancellationToken cancellation)
    {
        var clock = Stopwatch.StartNew();
        var read = CaseFileReader.Read(path);
        var directory = target ?? Path.Combine("results", read.Name);
        ResultDirectory.Check(directory, overwrite);
        var inspection = Inspection.Of(read.Problem, read.Grid, read.Plan, read.Samplers.Count > 0 ? read.Walkers : 0);
        var reading = clock.Elapsed.TotalSeconds;
        var options = new ComparisonOptions
        {
            Schemes = [.. read.Methods.Select(name => CaseMethods.Scheme(name, read))],
            Samplers = [.. read.Samplers.Select(name => SamplerCatalogue.Find(name, read.SamplerOptions)!)],
            Walkers = read.Walkers,
            Seed = seed ?? read.Seed,
            DrawsBounds = true,
        };
        ComparisonResult result;
        IReadOnlyList<TransportPicture> maps;
        using (var team = new WorkerTeam(threads))
        using (var line = new ProgressLine(quiet))
        {
            result = Comparison.Run(read.Problem, read.Grid, read.Plan, options, team, line.For(read.Plan), cancellation);
            maps = result.Interrupted ? [] : TransportMaps.Of(result, team);
        }

        if (result.Interrupted && result.GridErrors.Count == 0)
            throw new OperationCanceledException();
        var computing = clock.Elapsed.TotalSeconds - reading;
        var place = result.Interrupted ? directory.TrimEnd(Path.DirectorySeparatorChar) + ".interrupted" : directory;
        if (result.Interrupted && Directory.Exists(place))
            Directory.Delete(place, recursive: true);
        var provenance = Provenance.Of(read, "run", seed, [.. read.Warnings, .. inspection.Warnings], [.. options.Schemes.Select(scheme => scheme.Traits.Source), .. options.Samplers.Select(sampler => sampler.Traits.Source)],
            new Dictionary<string, double> { ["reading"] = reading, ["computing"] = computing });
        WrittenRun written;
        using (var results = ResultDirectory.Begin(place))
        {
            // Finished work is written out also after an interrupt: the token is not passed on. A second interrupt ends the process, and leaves a
            // directory whose name says that it is partial.
            written = RunWriter.WriteAll(result, read.Labels, provenance, results.WorkingPath, maps, cancellation: CancellationToken.None);
            results.Commit();
        }

        Summary(host.Output, result, read.Labels, place);
        foreach (var sentence in inspection.Warnings.Concat(read.Warnings).Concat(written.Problems))
            host.Error.WriteLine($"note: {sentence}");
        foreach (var remark in result.Remarks)
            host.Error.WriteLine($"{(remark.IsFailure ? "not trusted" : "note")}: {(remark.Method is null ? "" : remark.Method + ": ")}{remark.Text}");
        return result.Interrupted ? ExitStatus.Interrupted : result.HasFailures ? ExitStatus.NotTrusted : ExitStatus.Done;
    }

    private static void Summary(TextWriter output, ComparisonResult result, CaseLabels labels, string place)
    {
        var last = result.GridErrors.Count - 1;
        var time = result.Plan.ReportTimes[last];
        var heading = result.Problem.Title.Length > 0 ? result.Problem.Title : "Result";
        output.WriteLine(string.Create(CultureInfo.InvariantCulture, $"{heading}, at t = {time}{(labels.Time is null ? "" : " " + labels.Time)}"));
        output.WriteLine();
        var flows = new TextTable("flow", "mean x", "var x", "F − F at equilibrium", "W2 to the exact flow", "largest over time");
        foreach (var row in result.Series.Where(row => row.Kind == SeriesKind.Flow && row.Time == time))
        {
            var largest = result.Series.Where(other => other.Method == row.Method).Max(other => other.DistanceToExact?.Distance);
            flows.Add(row.Method, Number(row.Moments.MeanX), Number(row.Moments.VarianceX), Number(row.FreeEnergy - result.EquilibriumFreeEnergy),
                row.Method == "exact" ? "" : Number(row.DistanceToExact?.Distance), row.Method == "exact" ? "" : Number(largest));
        }

        output.Write(flows);
        if (result.GridErrors[last] is { } grid)
            output.WriteLine(string.Create(CultureInfo.InvariantCulture, $"  The exact flow's own grid error is about {Numbers.Short(grid, 3)} in W2 at this time."));
        if (result.Budget.Count > 0)
        {
            output.WriteLine();
            var budget = new TextTable("sampler", "W2 to the exact flow", "step bias", "noise (mean)", "noise (95 %)", "p", "verdict");
            foreach (var row in result.Budget.Where(row => row.Time == time))
                budget.Add(row.Sampler, Number(row.Total), Number(row.StepBias), Number(row.NoiseMean), Number(row.Noise95), Number(row.PValue), row.Verdict);
            output.Write(budget);
        }

        output.WriteLine();
        output.WriteLine($"{(result.Interrupted ? "Interrupted; what was finished is in" : "Written to")} {place}. Open {Path.Combine(place, "report.html")} in a browser.");
    }

    private static string Number(double? value) => Numbers.Short(value, 4);
}
