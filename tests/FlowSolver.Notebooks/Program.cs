using FlowSolver.Notebooks;

// run: executes every notebook and fails on any cell error or on text that differs from what is stored.
// rewrite: executes every notebook and stores its outputs.
if (args.Length < 1 || args[0] is not ("run" or "rewrite"))
{
    Console.Error.WriteLine("Usage: dotnet run --project tests/FlowSolver.Notebooks -- run|rewrite [FILE.ipynb …]");
    return 2;
}

var root = AppContext.BaseDirectory;
while (!File.Exists(Path.Combine(root, "FlowSolver.sln")))
    root = Path.GetDirectoryName(root) ?? throw new InvalidOperationException("FlowSolver.sln was not found above the program.");
var folder = Path.Combine(root, "notebooks-csharp");
var files = args.Length > 1 ? args[1..] : [.. Directory.EnumerateFiles(folder, "*.ipynb").Order(StringComparer.Ordinal)];
Directory.SetCurrentDirectory(folder);
var (passed, failed) = (0, 0);
foreach (var file in files)
{
    var fault = await Notebook.ExecuteAsync(Path.GetFullPath(file), rewrite: args[0] == "rewrite");
    Console.WriteLine($"{Path.GetFileName(file)}: {fault ?? "ok"}");
    if (fault is null)
        passed++;
    else
        failed++;
}

Console.WriteLine($"notebooks: {passed} passed, {failed} failed");
return failed == 0 ? 0 : 1;
