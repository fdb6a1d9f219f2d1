using System.Text.Json.Nodes;
using FlowSolver.Ensembles;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Reporting;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>When a step counts as solved.</summary>
/// <param name="DualGap">Largest relative duality gap of a certified step.</param>
public sealed record CaseTolerances(double DualGap);

/// <summary>A case file, read and checked: everything that a command needs. Immutable.</summary>
public sealed record CaseFile
{
    /// <summary>The file as the user named it.</summary>
    public required string Path { get; init; }

    /// <summary>The file's name without folder and ending.</summary>
    public required string Name { get; init; }

    /// <summary>A line for the reader; empty where the case gives none.</summary>
    public required string Title { get; init; }

    /// <summary>The problem.</summary>
    public required Problem Problem { get; init; }

    /// <summary>The grid.</summary>
    public required Grid Grid { get; init; }

    /// <summary>Report times and steps.</summary>
    public required TimePlan Plan { get; init; }

    /// <summary>Names of flow methods, as the case lists them.</summary>
    public required IReadOnlyList<string> Methods { get; init; }

    /// <summary>Names of samplers, as the case lists them.</summary>
    public required IReadOnlyList<string> Samplers { get; init; }

    /// <summary>Walkers in each ensemble.</summary>
    public required int Walkers { get; init; }

    /// <summary>Seed of the ensembles.</summary>
    public required ulong Seed { get; init; }

    /// <summary>Options of those samplers that have any.</summary>
    public required SamplerOptions SamplerOptions { get; init; }

    /// <summary>Units for axes and tables.</summary>
    public required CaseLabels Labels { get; init; }

    /// <summary>When a step counts as solved.</summary>
    public required CaseTolerances Tolerances { get; init; }

    /// <summary>The case as TOML with every value written out, defaults included.</summary>
    public required string ResolvedText { get; init; }

    /// <summary>The same as values, for programs.</summary>
    public required JsonObject ResolvedValues { get; init; }

    /// <summary>What the reader of the case should know though it can be run, one sentence each.</summary>
    public required IReadOnlyList<string> Warnings { get; init; }
}
