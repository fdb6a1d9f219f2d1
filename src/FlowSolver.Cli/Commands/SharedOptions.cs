using System.CommandLine;
using FlowSolver.Foundation;

namespace FlowSolver.Cli.Commands;

/// <summary>Options and arguments that several commands take.</summary>
internal static class SharedOptions
{
    /// <summary>The case file.</summary>
    public static Argument<string> Case() => new("CASE") { Description = "Case file (TOML)." };

    /// <summary>Where results go.</summary>
    public static Option<string?> Out(string byDefault) => new("--out")
    {
        Description = $"Directory for the results. Default: {byDefault}.",
        HelpName = "DIR",
    };

    /// <summary>Replace an earlier result.</summary>
    public static Option<bool> Overwrite() => new("--overwrite") { Description = "Replace an earlier result in the same place." };

    /// <summary>Seed in place of the case's.</summary>
    public static Option<ulong?> Seed() => new("--seed") { Description = "Seed of the ensembles, in place of the case's.", HelpName = "N" };

    /// <summary>Threads.</summary>
    public static Option<int?> Threads() => new("--threads")
    {
        Description = "Threads to use. Default: all cores. The numbers do not depend on it.",
        HelpName = "N",
    };

    /// <summary>No progress.</summary>
    public static Option<bool> Quiet() => new("--quiet") { Description = "No progress on standard error." };

    /// <summary>Checks and resolves the number of threads.</summary>
    /// <exception cref="InputException">The number is out of range.</exception>
    public static int ResolveThreads(int? asked) => asked switch
    {
        null => Environment.ProcessorCount,
        >= 1 and <= 1024 => asked.Value,
        _ => throw new InputException($"--threads was {asked}; it must be a whole number from 1 to 1024."),
    };

    /// <summary>Adds examples to a command's description, one a line.</summary>
    public static string WithExamples(string text, params ReadOnlySpan<string> examples)
    {
        foreach (var example in examples)
            text += $"\n  Example: {example}";
        return text;
    }
}
