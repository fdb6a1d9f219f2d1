using System.Globalization;
using System.Text;
using System.Text.Encodings.Web;
using System.Text.Json;
using System.Text.Json.Nodes;
using FlowSolver.Ensembles;
using FlowSolver.Formulas;
using FlowSolver.Schemes;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>
/// The reference of case files, as a page and as a JSON schema, made from the tables that the reader itself works from: neither can say anything
/// else than what is read.
/// </summary>
public static class CaseReference
{
    private static readonly JsonSerializerOptions SchemaOptions = new()
    {
        WriteIndented = true,
        NewLine = "\n",
        IndentSize = 2,
        Encoder = JavaScriptEncoder.UnsafeRelaxedJsonEscaping,
    };

    /// <summary>The page, in Markdown.</summary>
    public static string Markdown()
    {
        var text = new StringBuilder();
        text.Append("# Case files\n\nA case is a TOML 1.0 file. Unknown keys are errors. This page is made by `flowsolver reference`.\n\n");
        foreach (var table in CaseKeys.Tables)
        {
            var keys = CaseKeys.All.Where(key => key.Table == table.Path).ToList();
            text.Append(CultureInfo.InvariantCulture, $"## {(table.Path.Length == 0 ? "Top of the file" : $"[{table.Path}]")}\n\n{table.Meaning}{(table.IsRequired ? "" : " May be left out.")}\n\n");
            if (keys.Count == 0)
                continue;
            text.Append("| key | what it is | must be | unit | default | example |\n| --- | --- | --- | --- | --- | --- |\n");
            foreach (var key in keys)
            {
                text.Append(CultureInfo.InvariantCulture,
                    $"| `{key.Name}` | {Cell(key.Meaning)} | {Cell(key.Rule)} | {key.Unit} | {(key.Default is null ? (key.IsRequired ? "required" : "") : $"`{Cell(key.Default)}`")} | `{Cell(key.Example)}` |\n");
            }

            text.Append('\n');
        }

        text.Append("## Flow methods\n\n| name | what it does | dimensions | order in time | source |\n| --- | --- | --- | --- | --- |\n");
        foreach (var traits in SchemeCatalogue.All.Select(scheme => scheme.Traits))
        {
            text.Append(CultureInfo.InvariantCulture,
                $"| `{traits.Name}` | {Cell(traits.Summary)} | {string.Join(", ", traits.Dimensions)} | {(traits.OrderInTime is { } order ? order.ToString(CultureInfo.InvariantCulture) : "exact")} | {Cell(traits.Source)} |\n");
        }

        text.Append("\n## Samplers\n\n| name | what it does | law on the grid | weak order | source |\n| --- | --- | --- | --- | --- |\n");
        foreach (var traits in SamplerCatalogue.All.Select(sampler => sampler.Traits))
        {
            text.Append(CultureInfo.InvariantCulture,
                $"| `{traits.Name}` | {Cell(traits.Summary)} | {(traits.Law is { } law ? $"`{law.Traits.Name}`" : "none")} | {(traits.WeakOrder is { } order ? order.ToString(CultureInfo.InvariantCulture) : "no step bias")} | {Cell(traits.Source)} |\n");
        }

        text.Append(CultureInfo.InvariantCulture,
            $"\n## Formulas\n\nOperators `+ - * / ^`, unary minus and parentheses; `^` binds right and tighter than unary minus, so `-x^2` is `-(x^2)`. Names with a fixed meaning: {string.Join(", ", FormulaLanguage.FixedNames.Select(name => $"`{name}`"))}; further names come from `energy.constants`. A formula has at most {FormulaLanguage.LongestText} characters and {FormulaLanguage.DeepestNesting} levels of nesting.\n\n");
        text.Append("| function | value |\n| --- | --- |\n");
        foreach (var function in FormulaLanguage.Functions)
            text.Append(CultureInfo.InvariantCulture, $"| `{function.Name}({(function.Arguments == 2 ? "u, v" : "u")})` | {Cell(function.Meaning)} |\n");
        text.Append("\n## Limits\n\n| what | at most | because |\n| --- | --- | --- |\n");
        foreach (var limit in CaseLimits.All)
            text.Append(CultureInfo.InvariantCulture, $"| {limit.What} | {limit.Shown} | {limit.Reason} |\n");
        return text.ToString();
    }

    /// <summary>The JSON schema (draft 2020-12), for editors that check and complete TOML by one.</summary>
    public static string Schema()
    {
        var root = Table("");
        root["$schema"] = "https://json-schema.org/draft/2020-12/schema";
        root["title"] = "FlowSolver case";
        return root.ToJsonString(SchemaOptions) + "\n";
    }

    private static JsonObject Table(string path)
    {
        var entry = CaseKeys.FindTable(path)!;
        var properties = new JsonObject();
        var required = new JsonArray();
        foreach (var key in CaseKeys.All.Where(key => key.Table == path))
        {
            properties[key.Name] = Value(key);
            if (key.IsRequired)
                required.Add(key.Name);
        }

        foreach (var child in CaseKeys.Tables.Where(table => table.Path.Length > 0 && Parent(table.Path) == path))
        {
            var name = child.Path[(child.Path.LastIndexOf('.') + 1)..];
            properties[name] = Table(child.Path);
            if (child.IsRequired)
                required.Add(name);
        }

        var schema = new JsonObject { ["type"] = "object", ["description"] = entry.Meaning, ["properties"] = properties, ["additionalProperties"] = false };
        if (required.Count > 0)
            schema["required"] = required;
        return schema;
    }

    private static string Parent(string path) => path.Contains('.', StringComparison.Ordinal) ? path[..path.LastIndexOf('.')] : "";

    private static JsonObject Value(CaseKey key)
    {
        var schema = new JsonObject { ["description"] = key.Unit.Length == 0 ? key.Meaning : $"{key.Meaning} Unit: {key.Unit}." };
        switch (key.Kind)
        {
            case CaseValueKind.Choice:
                schema["enum"] = new JsonArray([.. key.Choices.Select(choice => (JsonNode?)JsonValue.Create(choice))]);
                break;
            case CaseValueKind.Number:
                schema["type"] = "number";
                if (key.IsPositive)
                    schema["exclusiveMinimum"] = 0;
                break;
            case CaseValueKind.WholeNumber:
                schema["type"] = "integer";
                if (key.Least is { } least)
                    schema["minimum"] = least;
                if (key.Most is { } most)
                    schema["maximum"] = most;
                break;
            case CaseValueKind.NumberList:
                schema["type"] = "array";
                schema["items"] = new JsonObject { ["type"] = "number" };
                break;
            case CaseValueKind.NumberMatrix:
                schema["type"] = "array";
                schema["items"] = new JsonObject { ["type"] = "array", ["items"] = new JsonObject { ["type"] = "number" } };
                break;
            case CaseValueKind.NameList:
                schema["type"] = "array";
                schema["items"] = new JsonObject { ["enum"] = Names(key.Path) };
                break;
            case CaseValueKind.NumberTable:
                schema["type"] = "object";
                schema["additionalProperties"] = new JsonObject { ["type"] = "number" };
                break;
            default:
                schema["type"] = "string";
                break;
        }

        return schema;
    }

    private static JsonArray Names(string path) => new([.. (path == "ensemble.samplers"
        ? SamplerCatalogue.All.Select(sampler => sampler.Traits.Name)
        : SchemeCatalogue.All.Select(scheme => scheme.Traits.Name)).Select(name => (JsonNode?)JsonValue.Create(name))]);

    private static string Cell(string text) => text.Replace("|", "\\|", StringComparison.Ordinal);
}
