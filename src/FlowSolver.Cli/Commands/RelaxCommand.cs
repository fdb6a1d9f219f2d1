using System.CommandLine;
using System.Diagnostics;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Reporting.Reports;
using FlowSolver.Studies;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver relax</c>: spectral gap, slow modes, passage times.</summary>
internal static class RelaxCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var path = SharedOptions.Case();
        var modes = new Option<int>("--modes") { Description = "Number of modes beside equilibrium, 1 to 50. Default: 6.", HelpName = "K", DefaultValueFactory = _ => 6 };
        var target = SharedOptions.Out("results/<case file's name>-relax");
        var threads = SharedOptions.Threads();
        var overwrite = SharedOptions.Overwrite();
        var quiet = SharedOptions.Quiet();
        var command = new Command("relax", SharedOptions.WithExamples(
            "How fast the case relaxes: spectral gap, slow modes and their shapes, decay rates predicted against measured, wells and passes, Kramers-Eyring estimate, mean first passage times, effective diffusion on periodic axes.",
            "flowsolver relax cases/two-well-trap.toml --modes 4"))
        { path, modes, target, threads, overwrite, quiet };
        command.SetAction(parsed => host.Guard(cancellation => Run(
            host, parsed.GetValue(path)!, parsed.GetValue(modes), parsed.GetValue(target),
            SharedOptions.ResolveThreads(parsed.GetValue(threads)), parsed.GetValue(overwrite), parsed.GetValue(quiet), cancellation)));
        return command;
    }

    private static int Run(CommandHost host, string path, int modes, string? target, int threads, bool overwrite, bool quiet, CancellationToken cancellation)
    {
        if (modes is < 1 or > 50)
            throw new InputException($"--modes was {modes}; it must be a whole number from 1 to 50.");
        var read = CaseFileReader.Read(path);
        if (modes + 1 > read.Grid.CellCount / 4)
            throw new InputException($"--modes was {modes}; on a grid of {read.Grid.CellCount} cells it must be below {read.Grid.CellCount / 4 - 1}.");
        var directory = target ?? Path.Combine("results", read.Name + "-relax");
        ResultDirectory.Check(directory, overwrite);
        var clock = Stopwatch.StartNew();
        RelaxationResult result;
        using (var team = new WorkerTeam(threads))
        using (var line = new ProgressLine(quiet))
        {
            line.Show(0, 1, "modes and passages");
            result = Relaxation.Analyse(new GridProblem(read.Problem, read.Grid), new RelaxationOptions { Modes = modes }, team, cancellation);
            line.Show(1, 1, "done");
        }

        var provenance = Provenance.Of(read, "relax", null, read.Warnings,
            ["H. Risken, The Fokker-Planck Equation, 2nd ed. 1989, chapter 5 (modes)", "H. Kramers, Physica 7 (1940) 284; A. Bovier, M. Eckhoff, V. Gayrard, M. Klein, J. Eur. Math. Soc. 6 (2004) 399 (escape)"],
            new Dictionary<string, double> { ["computing"] = clock.Elapsed.TotalSeconds });
        return StudyRunner.Finish(host, RelaxReport.Of(result, read.Labels, provenance, read.Title.Length > 0 ? read.Title : read.Name), directory, RelaxReport.Modes(result, read.Labels));
    }
}
