using System.Globalization;
using System.Text;
using System.Text.Json.Nodes;
using FlowSolver.Problems;
using FlowSolver.Reporting;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>A case with every value written out, defaults included, as TOML and as values.</summary>
internal sealed class ResolvedCase(CaseValues values, TimePlan plan)
{
    /// <summary>The case as a case file that would read the same.</summary>
    public string ToText()
    {
        var text = new StringBuilder();
        foreach (var table in CaseKeys.Tables)
        {
            var lines = new List<string>();
            foreach (var (key, value) in Entries(table.Path))
                lines.Add($"{key.Name} = {Literal(value)}");
            if (lines.Count == 0)
                continue;
            if (table.Path.Length > 0)
                text.Append('[').Append(table.Path).Append("]\n");
            foreach (var line in lines)
                text.Append(line).Append('\n');
        }

        return text.ToString();
    }

    /// <summary>The case as nested objects.</summary>
    public JsonObject ToJson()
    {
        var root = new JsonObject();
        foreach (var table in CaseKeys.Tables)
        {
            foreach (var (key, value) in Entries(table.Path))
            {
                var target = root;
                foreach (var part in table.Path.Split('.', StringSplitOptions.RemoveEmptyEntries))
                {
                    if (target[part] is not JsonObject inner)
                        target[part] = inner = [];
                    target = inner;
                }

                target[key.Name] = Node(value);
            }
        }

        return root;
    }

    private IEnumerable<(CaseKey Key, object Value)> Entries(string table)
    {
        foreach (var key in CaseKeys.All)
        {
            if (key.Table != table || !values.Applies(key))
                continue;
            // The plan knows the last time also where the case left it out.
            if (key.Path == "time.until")
                yield return (key, plan.ReportTimes[^1]);
            else if (values.Find(key.Path) is { } value)
                yield return (key, value);
        }
    }

    private static string Literal(object value) => value switch
    {
        string text => Quoted(text),
        double number => Number(number),
        long whole => whole.ToString(CultureInfo.InvariantCulture),
        double[] list => $"[{string.Join(", ", list.Select(Number))}]",
        double[][] matrix => $"[{string.Join(", ", matrix.Select(row => Literal(row)))}]",
        string[] names => $"[{string.Join(", ", names.Select(Quoted))}]",
        Dictionary<string, double> { Count: 0 } => "{}",
        Dictionary<string, double> table => $"{{ {string.Join(", ", table.Select(pair => $"{pair.Key} = {Number(pair.Value)}"))} }}",
        _ => throw new ArgumentException($"The value was a {value.GetType().Name}; it must be of a kind that keys take."),
    };

    private static JsonNode Node(object value) => value switch
    {
        string text => text,
        double number => number,
        long whole => whole,
        double[] list => new JsonArray([.. list.Select(number => (JsonNode)number)]),
        double[][] matrix => new JsonArray([.. matrix.Select(row => Node(row))]),
        string[] names => new JsonArray([.. names.Select(name => (JsonNode)name)]),
        Dictionary<string, double> table => new JsonObject(table.Select(pair => new KeyValuePair<string, JsonNode?>(pair.Key, pair.Value))),
        _ => throw new ArgumentException($"The value was a {value.GetType().Name}; it must be of a kind that keys take."),
    };

    private static string Number(double value)
    {
        var text = Numbers.Exact(value);
        // A TOML number with an exponent or a point is a float; one without is whole, which reads the same here.
        return text.Replace("E+", "e+", StringComparison.Ordinal).Replace("E-", "e-", StringComparison.Ordinal);
    }

    internal static string Quoted(string text)
    {
        var quoted = new StringBuilder("\"");
        foreach (var character in text)
        {
            quoted.Append(character switch
            {
                '"' => "\\\"",
                '\\' => "\\\\",
                '\n' => "\\n",
                '\t' => "\\t",
                '\r' => "\\r",
                _ when char.IsControl(character) => string.Create(CultureInfo.InvariantCulture, $"\\u{(int)character:X4}"),
                _ => character.ToString(),
            });
        }

        return quoted.Append('"').ToString();
    }
}
