using System.Globalization;
using System.Text.Encodings.Web;
using System.Text.Json;
using System.Text.Json.Nodes;
using FlowSolver.Grids;
using FlowSolver.Reporting.Figures;
using Microsoft.CodeAnalysis.CSharp.Scripting;
using Microsoft.CodeAnalysis.Scripting;
using Microsoft.CodeAnalysis.Scripting.Hosting;

namespace FlowSolver.Notebooks;

/// <summary>Executes the code cells of an <c>.ipynb</c> file (nbformat 4) one after the other in one C# scripting session.</summary>
internal static class Notebook
{
    private static readonly JsonSerializerOptions Options = new()
    {
        WriteIndented = true,
        NewLine = "\n",
        IndentSize = 1,
        Encoder = JavaScriptEncoder.UnsafeRelaxedJsonEscaping,
    };

    /// <summary>Executes a notebook. Figures that a cell ends on are stored as SVG, everything else as text.</summary>
    /// <param name="path">The file.</param>
    /// <param name="rewrite">Whether to store the outputs; otherwise stored text outputs must be met.</param>
    /// <returns>What went wrong, in one line; null when nothing did.</returns>
    public static async Task<string?> ExecuteAsync(string path, bool rewrite)
    {
        var notebook = JsonNode.Parse(await File.ReadAllTextAsync(path))!.AsObject();
        // #r paths in cells are relative to the notebook, as a kernel started beside it takes them.
        var options = ScriptOptions.Default.WithFilePath(path)
            .WithMetadataResolver(ScriptMetadataResolver.Default.WithBaseDirectory(Path.GetDirectoryName(path)))
            .WithImports("System", "System.Linq", "System.Collections.Generic");
        // The cells load the library from another folder. With these two registered, the script runs on the runner's own copies, so that a Figure
        // made in a cell is the Figure known here.
        using var loader = new InteractiveAssemblyLoader();
        loader.RegisterDependency(typeof(Density).Assembly);
        loader.RegisterDependency(typeof(Figure).Assembly);
        ScriptState<object>? state = null;
        var count = 0;
        foreach (var cell in notebook["cells"]!.AsArray().Select(node => node!.AsObject()))
        {
            if ((string?)cell["cell_type"] != "code")
                continue;
            count++;
            var code = string.Concat(cell["source"]!.AsArray().Select(line => (string?)line));
            var before = Console.Out;
            using var printed = new StringWriter(CultureInfo.InvariantCulture) { NewLine = "\n" };
            Console.SetOut(printed);
            try
            {
                state = state is null ? await CSharpScript.Create<object>(code, options, assemblyLoader: loader).RunAsync() : await state.ContinueWithAsync(code, options);
            }
            catch (CompilationErrorException exception)
            {
                return $"cell {count}: {exception.Diagnostics[0]}";
            }
            catch (Exception exception)
            {
                return $"cell {count}: {exception.GetType().Name}: {exception.Message}";
            }
            finally
            {
                Console.SetOut(before);
            }

            var outputs = Outputs(printed.ToString(), state.ReturnValue, count);
            if (rewrite)
            {
                cell["execution_count"] = count;
                cell["outputs"] = outputs;
            }
            else if (Text(outputs) != Text(cell["outputs"]?.AsArray() ?? []))
            {
                return $"cell {count}: its text output is not the stored one; look at it, then run rewrite. Now: {Text(outputs).Trim().Replace('\n', '|')}";
            }
        }

        if (rewrite)
            await File.WriteAllTextAsync(path, notebook.ToJsonString(Options) + "\n");
        return count == 0 ? "there are no code cells" : null;
    }

    private static JsonArray Outputs(string printed, object? value, int count)
    {
        var outputs = new JsonArray();
        if (printed.Length > 0)
            outputs.Add(new JsonObject { ["name"] = "stdout", ["output_type"] = "stream", ["text"] = Lines(printed) });
        if (value is Figure figure)
        {
            using var writer = new FigureWriter();
            outputs.Add(Result(count, new JsonObject { ["image/svg+xml"] = Lines(writer.Svg(figure)), ["text/plain"] = Lines(figure.Description) }));
        }
        else if (value is not null)
        {
            outputs.Add(Result(count, new JsonObject { ["text/plain"] = Lines(Convert.ToString(value, CultureInfo.InvariantCulture) ?? "") }));
        }

        return outputs;
    }

    private static JsonObject Result(int count, JsonObject data) => new()
    {
        ["data"] = data,
        ["execution_count"] = count,
        ["metadata"] = new JsonObject(),
        ["output_type"] = "execute_result",
    };

    private static JsonArray Lines(string text)
    {
        var lines = text.Split('\n');
        return new JsonArray([.. lines.Select((line, i) => i < lines.Length - 1 ? line + "\n" : line).Where(line => line.Length > 0).Select(line => (JsonNode?)JsonValue.Create(line))]);
    }

    // The text of all outputs: what must stay the same from one machine to the next. Pictures may differ in their fonts.
    private static string Text(JsonArray outputs) => string.Concat(outputs.Select(output =>
        string.Concat((output?["text"] ?? output?["data"]?["text/plain"])?.AsArray().Select(line => (string?)line) ?? []) + "\n"));
}
