using System.CommandLine;
using FlowSolver.Foundation;
using FlowSolver.Reporting.Page;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver gather</c>: one page that compares several written runs.</summary>
internal static class GatherCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var directories = new Argument<string[]>("DIR") { Description = "Result directories of runs, two or more.", Arity = ArgumentArity.OneOrMore };
        var target = new Option<string>("--out") { Description = "The page to write.", HelpName = "FILE", Required = true };
        var overwrite = new Option<bool>("--overwrite") { Description = "Replace the file if it exists." };
        var command = new Command("gather", SharedOptions.WithExamples(
            "Compares several written runs on one page: what differs between their cases, and how far each method was from the exact flow in each.",
            "flowsolver gather results/coarse results/fine --out comparison.html"))
        { directories, target, overwrite };
        command.SetAction(parsed => host.Guard(_ =>
        {
            var path = Path.GetFullPath(parsed.GetValue(target)!);
            if (Directory.Exists(path))
                throw new InputException($"--out was the directory {parsed.GetValue(target)}; it must be the name of a file, such as comparison.html.");
            if (File.Exists(path) && !parsed.GetValue(overwrite))
                throw new InputException($"The file {parsed.GetValue(target)} exists already. Add --overwrite to replace it, or choose another name.");
            var html = PageWriter.Html(GatherPage.Model(parsed.GetValue(directories)!));
            Directory.CreateDirectory(Path.GetDirectoryName(path)!);
            var partial = $"{path}.partial-{Environment.ProcessId}";
            try
            {
                File.WriteAllText(partial, html);
                File.Move(partial, path, overwrite: true);
            }
            finally
            {
                File.Delete(partial);
            }

            host.Output.WriteLine($"Wrote {parsed.GetValue(target)}.");
            return ExitStatus.Done;
        }));
        return command;
    }
}
