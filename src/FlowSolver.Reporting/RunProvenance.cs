using System.Text.Json.Nodes;

namespace FlowSolver.Reporting;

/// <summary>Where a result came from: what the caller knows and the records do not say. Goes to <c>run.json</c> and to the foot of the page.</summary>
public sealed record RunProvenance
{
    /// <summary>The case's name: its file's name without folder and ending.</summary>
    public required string CaseName { get; init; }

    /// <summary>What was asked for, such as <c>run</c>.</summary>
    public string Command { get; init; } = "run";

    /// <summary>The resolved case as text: every value, defaults included, in the form of a case file. Shown on the page.</summary>
    public required string ResolvedCase { get; init; }

    /// <summary>The resolved case as values, for programs that read <c>run.json</c>; null where the caller has only the text.</summary>
    public JsonObject? ResolvedValues { get; init; }

    /// <summary>Versions by name: the program, the runtime, the libraries.</summary>
    public required IReadOnlyDictionary<string, string> Versions { get; init; }

    /// <summary>Wall-clock seconds by phase.</summary>
    public IReadOnlyDictionary<string, double> Timings { get; init; } = new Dictionary<string, double>();

    /// <summary>Published sources of the methods that were used, one citation each.</summary>
    public IReadOnlyList<string> Sources { get; init; } = [];

    /// <summary>Warnings that arose outside the computation, such as those of the case reader; one sentence each.</summary>
    public IReadOnlyList<string> Warnings { get; init; } = [];

    /// <summary>When the run started; null where it is not to be written down.</summary>
    public DateTimeOffset? Started { get; init; }
}
