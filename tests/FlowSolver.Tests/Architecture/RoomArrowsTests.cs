using System.Text.RegularExpressions;

namespace FlowSolver.Tests.Architecture;

/// <summary>
/// Arrows between the rooms point one way. One assembly cannot enforce this, so the table stands here as data and the sources are read.
/// Tried: a using of FlowSolver.Schemes in a file of Grids fails here.
/// </summary>
public sealed partial class RoomArrowsTests
{
    // Each room may use only itself and rooms before it.
    private static readonly string[] Rooms =
        ["Foundation", "Formulas", "Problems", "Grids", "Transport", "Schemes", "Ensembles", "Diagnostics", "Studies"];

    // Assembly → rooms and assemblies it may name.
    private static readonly (string Assembly, string[] MayUse)[] Assemblies =
    [
        ("FlowSolver.Reporting", [.. Rooms, "Reporting"]),
        ("FlowSolver.Cli", [.. Rooms, "Reporting", "Cli"]),
    ];

    [Fact]
    public void Rooms_UseOnlyRoomsAboveThem()
    {
        var faults = new List<string>();
        foreach (var file in Sources("src/FlowSolver"))
        {
            var room = RoomOf(file, "src/FlowSolver");
            var place = Array.IndexOf(Rooms, room);
            Assert.True(place >= 0, $"{file} is in no known room ({room}).");
            foreach (var used in NamesUsed(file))
            {
                var other = Array.IndexOf(Rooms, used);
                if (other > place || used is "Reporting" or "Cli")
                    faults.Add($"{file} ({room}) uses {used}");
            }
        }

        Assert.True(faults.Count == 0, string.Join('\n', faults));
    }

    [Fact]
    public void Assemblies_UseOnlyWhatTheTableAllows()
    {
        var faults = new List<string>();
        foreach (var (assembly, mayUse) in Assemblies)
        {
            foreach (var file in Sources($"src/{assembly}"))
                faults.AddRange(NamesUsed(file).Where(used => !mayUse.Contains(used)).Select(used => $"{file} uses {used}"));
        }

        Assert.True(faults.Count == 0, string.Join('\n', faults));
    }

    [Fact]
    public void Files_NamespaceIsFolder()
    {
        var faults = new List<string>();
        foreach (var project in new[] { "FlowSolver", "FlowSolver.Reporting", "FlowSolver.Cli" })
        {
            foreach (var file in Sources($"src/{project}"))
            {
                var folder = Path.GetDirectoryName(Path.GetRelativePath(Path.Combine(Root, "src", project), file))!;
                var expected = folder.Length == 0 ? project : $"{project}.{folder.Replace(Path.DirectorySeparatorChar, '.')}";
                var found = NamespaceLine().Match(File.ReadAllText(file)).Groups[1].Value;
                if (found.Length > 0 && found != expected)
                    faults.Add($"{file}: namespace {found}, folder {expected}");
            }
        }

        Assert.True(faults.Count == 0, string.Join('\n', faults));
    }

    [Fact]
    public void Library_TouchesNoConsoleFileOrPlot()
    {
        var faults = new List<string>();
        foreach (var file in Sources("src/FlowSolver"))
        {
            if (ForbiddenInLibrary().Match(WithoutComments(file)) is { Success: true } match)
                faults.Add($"{file}: {match.Value}");
        }

        Assert.True(faults.Count == 0, string.Join('\n', faults));
    }

    internal static string Root { get; } = FindRoot();

    private static string FindRoot()
    {
        var folder = AppContext.BaseDirectory;
        while (!File.Exists(Path.Combine(folder, "FlowSolver.sln")))
            folder = Path.GetDirectoryName(folder) ?? throw new InvalidOperationException("FlowSolver.sln was not found above the tests.");
        return folder;
    }

    private static IEnumerable<string> Sources(string folder) => Directory
        .EnumerateFiles(Path.Combine(Root, folder), "*.cs", SearchOption.AllDirectories)
        .Where(file => !file.Contains($"{Path.DirectorySeparatorChar}obj{Path.DirectorySeparatorChar}", StringComparison.Ordinal)
            && !file.Contains($"{Path.DirectorySeparatorChar}bin{Path.DirectorySeparatorChar}", StringComparison.Ordinal));

    private static string RoomOf(string file, string project)
        => Path.GetRelativePath(Path.Combine(Root, project), file).Split(Path.DirectorySeparatorChar)[0];

    private static IEnumerable<string> NamesUsed(string file)
        => RoomName().Matches(WithoutComments(file)).Select(match => match.Groups[1].Value).Distinct()
            .Where(name => Rooms.Contains(name) || name is "Reporting" or "Cli");

    private static string WithoutComments(string file)
        => string.Join('\n', File.ReadLines(file).Where(line => !line.TrimStart().StartsWith("//", StringComparison.Ordinal)));

    [GeneratedRegex(@"\bFlowSolver\.([A-Z]\w+)")]
    private static partial Regex RoomName();

    [GeneratedRegex(@"^namespace\s+([\w.]+);", RegexOptions.Multiline)]
    private static partial Regex NamespaceLine();

    [GeneratedRegex(@"\bConsole\.|\bFile\.(Read|Write|Open|Create)|\bOxyPlot\b|\bCsvHelper\b|new StreamReader\(")]
    private static partial Regex ForbiddenInLibrary();
}
