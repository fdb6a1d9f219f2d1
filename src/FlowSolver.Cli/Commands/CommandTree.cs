using System.CommandLine;
using FlowSolver.Foundation;

namespace FlowSolver.Cli.Commands;

/// <summary>The commands by name.</summary>
internal static class CommandTree
{
    /// <summary>Builds the tree.</summary>
    public static RootCommand Create(CommandHost host)
    {
        var root = new RootCommand(
            "Drift-diffusion in an energy landscape: advances a density by the exact flow, by JKO steps and by operator splitting, runs Langevin "
            + "ensembles beside them, and says how much of each difference is step bias, noise and grid error.")
        {
            RunCommand.Create(host),
            CheckCommand.Create(host),
            AuditCommand.Create(host),
            ConvergeCommand.Create(host),
            GatherCommand.Create(host),
            RelaxCommand.Create(host),
            SuggestCommand.Create(host),
            NewCommand.Create(host),
            ReferenceCommand.Create(host),
        };
        return root;
    }

    /// <summary>One sentence for what could not be parsed, with the nearest known word.</summary>
    public static string Explain(ParseResult parsed)
    {
        var command = parsed.CommandResult.Command;
        var unknown = parsed.UnmatchedTokens.Count > 0 ? parsed.UnmatchedTokens[0] : null;
        var path = command is RootCommand ? "flowsolver" : $"flowsolver {command.Name}";
        if (unknown is not null)
        {
            var isOption = unknown.StartsWith('-');
            var known = isOption
                ? command.Options.Select(option => option.Name).ToList()
                : command.Subcommands.Select(child => child.Name).ToList();
            var nearest = NearestName.Among(unknown, known);
            var kind = isOption ? "option" : command.Subcommands.Count > 0 ? "command" : "argument";
            return $"there is no {kind} \"{unknown}\"{(nearest is null ? "" : $"; did you mean \"{nearest}\"?")} {Sentence(path)}";
        }

        return $"{parsed.Errors[0].Message.TrimEnd('.')}. {Sentence(path)}";

        static string Sentence(string path) => $"See {path} --help.";
    }
}
