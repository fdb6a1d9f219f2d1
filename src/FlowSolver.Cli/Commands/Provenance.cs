using System.Reflection;
using System.Runtime.InteropServices;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Reporting;

namespace FlowSolver.Cli.Commands;

/// <summary>Gathers what a result must say about where it came from.</summary>
internal static class Provenance
{
    /// <summary>The provenance of a command's result.</summary>
    public static RunProvenance Of(
        CaseFile read, string command, ulong? seed, IReadOnlyList<string> warnings, IReadOnlyList<string> sources, IReadOnlyDictionary<string, double> timings) => new()
        {
            CaseName = read.Name,
            Command = command,
            ResolvedCase = read.ResolvedText,
            ResolvedValues = read.ResolvedValues,
            Versions = Versions(),
            Timings = timings,
            Sources = [.. sources.Distinct()],
            Warnings = seed is null ? warnings : [.. warnings, FormattableString.Invariant($"The seed {seed} of the command line took the place of the case's.")],
        };

    /// <summary>The program's version.</summary>
    public static string Version { get; } =
        typeof(Provenance).Assembly.GetCustomAttribute<AssemblyInformationalVersionAttribute>()?.InformationalVersion.Split('+')[0] ?? "unknown";

    private static Dictionary<string, string> Versions() => new()
    {
        ["flowsolver"] = Version,
        ["runtime"] = RuntimeInformation.FrameworkDescription,
        ["system"] = RuntimeInformation.OSDescription,
        ["processor"] = RuntimeInformation.ProcessArchitecture.ToString(),
        ["MathNet.Numerics"] = typeof(MathNet.Numerics.SpecialFunctions).Assembly.GetName().Version?.ToString(3) ?? "",
    };
}
