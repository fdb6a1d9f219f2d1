using System.Globalization;
using System.Text.Json;
using System.Text.Json.Nodes;
using CsvHelper;
using FlowSolver.Foundation;

namespace FlowSolver.Reporting.Page;

/// <summary>One row of a written <c>series.csv</c>, as far as a comparison of runs needs it.</summary>
/// <param name="Time">Report time.</param>
/// <param name="Method">Scheme or sampler.</param>
/// <param name="IsEnsemble">Whether the row is an ensemble's.</param>
/// <param name="FreeEnergy">F; null where the cell is empty.</param>
/// <param name="RelativeEntropy">KL(ρ|π).</param>
/// <param name="Distance">W2 to the exact flow.</param>
public sealed record GatheredRow(double Time, string Method, bool IsEnsemble, double? FreeEnergy, double? RelativeEntropy, double? Distance);

/// <summary>A run as it was written to a folder: its <c>run.json</c> and <c>series.csv</c>.</summary>
/// <param name="Name">The folder's name.</param>
/// <param name="Record">What <c>run.json</c> says.</param>
/// <param name="Rows">Rows of <c>series.csv</c>.</param>
public sealed record GatheredRun(string Name, JsonObject Record, IReadOnlyList<GatheredRow> Rows)
{
    /// <summary>Reads a run's folder.</summary>
    /// <exception cref="InputException">The folder or one of its files is missing or cannot be read; the sentence names it.</exception>
    public static GatheredRun Read(string directory)
    {
        ArgumentNullException.ThrowIfNull(directory);
        if (!Directory.Exists(directory))
            throw Fault("The folder was not found.", "Name a folder that a run has written.", directory);
        var name = Path.GetFileName(Path.TrimEndingDirectorySeparator(Path.GetFullPath(directory)));
        return new GatheredRun(name, ReadRecord(Existing(directory, "run.json")), ReadSeries(Existing(directory, "series.csv")));
    }

    /// <summary>A text of the record; null where it has none.</summary>
    public string? Text(params string[] path) => Find(path) is JsonValue value && value.TryGetValue<string>(out var text) ? text : null;

    /// <summary>A number of the record; null where it has none.</summary>
    public double? Number(params string[] path) => Find(path) is JsonValue value && value.TryGetValue<double>(out var number) ? number : null;

    /// <summary>Whether the record says yes.</summary>
    public bool Is(params string[] path) => Find(path) is JsonValue value && value.TryGetValue<bool>(out var yes) && yes;

    internal JsonNode? Find(params string[] path)
    {
        JsonNode? node = Record;
        foreach (var step in path)
            node = node is JsonObject parent ? parent[step] : null;
        return node;
    }

    private static string Existing(string directory, string name)
    {
        var path = Path.Combine(directory, name);
        return File.Exists(path)
            ? path
            : throw Fault($"The folder holds no {name}.", "Only folders that 'flowsolver run' has written to the end can be gathered.", directory);
    }

    private static JsonObject ReadRecord(string path)
    {
        try
        {
            return JsonNode.Parse(File.ReadAllText(path)) as JsonObject ?? throw Fault("The file holds no JSON object.", "Gather the folder of a finished run.", path);
        }
        catch (JsonException error)
        {
            throw new InputException([new InputFault(
                "The file is not valid JSON.", "Run the case again, or restore the file.", path, error.LineNumber is { } line ? (int)line + 1 : null)]);
        }
    }

    private static List<GatheredRow> ReadSeries(string path)
    {
        try
        {
            using var reader = CsvReader.FromFile(path);
            reader.ReadHeader();
            var columns = new int[6];
            string[] names = ["time", "method", "kind", "free_energy", "relative_entropy", "w2_exact"];
            for (var i = 0; i < names.Length; i++)
            {
                if (!reader.TryGetFieldIndex(names[i], out columns[i]))
                    throw Fault($"The file has no column '{names[i]}'.", "Run the case again with this version.", path);
            }

            var rows = new List<GatheredRow>();
            while (reader.Read())
            {
                rows.Add(new GatheredRow(
                    Number(0) ?? throw Fault("The time is empty.", null, path, rows.Count + 2), reader.GetString(columns[1]), reader.GetString(columns[2]) == "ensemble",
                    Number(3), Number(4), Number(5)));
            }

            return rows;

            double? Number(int column)
            {
                var text = reader.GetString(columns[column]);
                if (text.Length == 0)
                    return null;
                return double.TryParse(text, NumberStyles.Float, CultureInfo.InvariantCulture, out var number) && double.IsFinite(number)
                    ? number
                    : throw Fault($"The cell '{names[column]}' was '{text}'; it must be a number or empty.", null, path, rows.Count + 2);
            }
        }
        catch (CsvFormatException error)
        {
            throw Fault("The file is not valid CSV: " + error.Message.ReplaceLineEndings(" "), null, path);
        }
    }

    private static InputException Fault(string message, string? remedy, string file, int? line = null)
        => new([new InputFault(message, remedy, file, line)]);
}
