using System.Text.Encodings.Web;
using System.Text.Json;
using System.Text.Json.Nodes;
using FlowSolver.Grids;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Archives;

/// <summary><c>run.json</c>: what is needed to know where a result came from and to make it again.</summary>
public static class RunRecord
{
    internal static JsonSerializerOptions Options { get; } = new()
    {
        WriteIndented = true,
        NewLine = "\n",
        IndentSize = 2,
        // Units and names keep their letters (µ, τ); the file is JSON, never pasted into a page as it is.
        Encoder = JavaScriptEncoder.UnsafeRelaxedJsonEscaping,
    };

    /// <summary>Writes the file and returns its path.</summary>
    /// <param name="result">What the run found.</param>
    /// <param name="labels">Units.</param>
    /// <param name="provenance">What the caller knows.</param>
    /// <param name="directory">Where to.</param>
    /// <param name="writingProblems">Outputs that could not be written, one sentence each; listed among the warnings.</param>
    public static string Write(
        ComparisonResult result, CaseLabels labels, RunProvenance provenance, string directory, IReadOnlyList<string>? writingProblems = null)
    {
        ArgumentNullException.ThrowIfNull(directory);
        var path = Path.Combine(directory, "run.json");
        File.WriteAllText(path, Model(result, labels, provenance, writingProblems).ToJsonString(Options) + "\n");
        return path;
    }

    /// <summary>The record as a tree of values.</summary>
    public static JsonObject Model(ComparisonResult result, CaseLabels labels, RunProvenance provenance, IReadOnlyList<string>? writingProblems = null)
    {
        ArgumentNullException.ThrowIfNull(result);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        var warnings = new JsonArray();
        foreach (var remark in result.Remarks)
        {
            warnings.Add(new JsonObject
            {
                ["method"] = remark.Method,
                ["time"] = remark.Time,
                ["text"] = remark.Text,
                ["failure"] = remark.IsFailure,
            });
        }

        foreach (var text in provenance.Warnings.Concat(writingProblems ?? []))
            warnings.Add(new JsonObject { ["method"] = null, ["time"] = null, ["text"] = text, ["failure"] = false });
        return new JsonObject
        {
            ["program"] = "FlowSolver",
            ["command"] = provenance.Command,
            ["case_name"] = provenance.CaseName,
            ["title"] = result.Problem.Title,
            ["started"] = provenance.Started?.ToString("O", System.Globalization.CultureInfo.InvariantCulture),
            ["complete"] = !result.Interrupted && !result.HasFailures,
            ["interrupted"] = result.Interrupted,
            ["failed"] = result.HasFailures,
            ["versions"] = Texts(provenance.Versions),
            ["seed"] = result.Seed,
            ["threads"] = result.Threads,
            ["walkers"] = result.WalkerCount,
            ["dimension"] = result.Grid.Dimension,
            ["axes"] = Axes(result.Grid),
            ["temperature"] = result.Problem.Temperature,
            ["mobility"] = result.Problem.Mobility,
            ["potential"] = result.Problem.Potential.Description,
            ["step"] = result.Plan.Step,
            ["report_times"] = new JsonArray([.. result.Plan.ReportTimes.Select(time => (JsonNode)time)]),
            ["equilibrium_free_energy"] = result.EquilibriumFreeEnergy,
            ["grid_w2"] = new JsonArray([.. result.GridErrors.Select(error => (JsonNode?)error)]),
            ["labels"] = new JsonObject { ["length"] = labels.Length, ["energy"] = labels.Energy, ["time"] = labels.Time },
            ["timings"] = new JsonObject(provenance.Timings.Select(pair => KeyValuePair.Create(pair.Key, (JsonNode?)pair.Value))),
            ["work"] = new JsonArray([.. result.Work.Select(row => (JsonNode)new JsonObject
            {
                ["method"] = row.Method,
                ["steps"] = row.Steps,
                ["iterations"] = row.Iterations,
                ["seconds"] = row.Seconds,
            })]),
            ["warnings"] = warnings,
            ["estimators"] = Texts(result.Estimators),
            ["sources"] = new JsonArray([.. provenance.Sources.Select(source => (JsonNode)source)]),
            ["case"] = provenance.ResolvedValues?.DeepClone(),
            ["case_text"] = provenance.ResolvedCase,
        };
    }

    private static JsonObject Texts(IReadOnlyDictionary<string, string> texts)
        => new(texts.Select(pair => KeyValuePair.Create(pair.Key, (JsonNode?)pair.Value)));

    private static JsonArray Axes(Grid grid)
    {
        var axes = new JsonArray(Describe("x", grid.X));
        if (grid.Y is not null)
            axes.Add((JsonNode)Describe("y", grid.Y));
        return axes;
    }

    private static JsonObject Describe(string name, Axis axis) => new()
    {
        ["name"] = name,
        ["from"] = axis.Interval.From,
        ["to"] = axis.Interval.To,
        ["cells"] = axis.Cells,
        ["ends"] = axis.IsPeriodic ? "periodic" : "reflecting",
    };
}
