using System.CommandLine;
using FlowSolver.Cli.CaseFiles;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver reference</c>: prints the reference of case files.</summary>
internal static class ReferenceCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var schema = new Option<bool>("--schema") { Description = "Print a JSON schema instead, for editors that check and complete case files." };
        var command = new Command("reference", SharedOptions.WithExamples(
            "Prints the reference of case files: every key, method, sampler, function and limit, made from the tables that the reader works from.",
            "flowsolver reference --schema > case.schema.json"))
        { schema };
        command.SetAction(parsed => host.Guard(_ =>
        {
            host.Output.Write(parsed.GetValue(schema) ? CaseReference.Schema() : CaseReference.Markdown());
            return ExitStatus.Done;
        }));
        return command;
    }
}
