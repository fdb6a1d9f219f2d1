using System.CommandLine;
using FlowSolver.Cli.Commands;

namespace FlowSolver.Cli;

/// <summary>The <c>flowsolver</c> command.</summary>
internal static class Program
{
    /// <summary>Runs the command line; see <c>flowsolver --help</c>.</summary>
    /// <returns>The exit status; see <see cref="ExitStatus"/>.</returns>
    public static int Main(string[] arguments) => Run(arguments, Console.Out, Console.Error);

    /// <summary>Runs the command line with given writers.</summary>
    internal static int Run(string[] arguments, TextWriter output, TextWriter error)
    {
        var root = CommandTree.Create(new CommandHost(output, error));
        var parsed = root.Parse(arguments);
        if (parsed.Errors.Count > 0)
        {
            error.WriteLine($"flowsolver: {CommandTree.Explain(parsed)}");
            return ExitStatus.BadInput;
        }

        return parsed.Invoke(new InvocationConfiguration { Output = output, Error = error, EnableDefaultExceptionHandler = false, ProcessTerminationTimeout = null });
    }
}
