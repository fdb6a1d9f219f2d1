using FlowSolver.Cli;
using FlowSolver.Foundation;

namespace FlowSolver.Tests.Cli;

public sealed class ResultDirectoryTests : IDisposable
{
    private readonly string root = Directory.CreateTempSubdirectory("flowsolver-test-").FullName;

    private string Target => Path.Combine(root, "results", "a case");

    // Tried: writing into the target itself; the directory then exists before Commit.
    [Fact]
    public void Begin_BeforeCommit_ShowsNothingUnderTheName()
    {
        using var results = ResultDirectory.Begin(Target);
        File.WriteAllText(Path.Combine(results.WorkingPath, "run.json"), "{}");
        Assert.False(Directory.Exists(Target));
        Assert.Contains("partial", Path.GetFileName(results.WorkingPath), StringComparison.Ordinal);
        results.Commit();
        Assert.True(File.Exists(Path.Combine(Target, "run.json")));
        Assert.False(Directory.Exists(results.WorkingPath));
    }

    [Fact]
    public void Dispose_WithoutCommit_LeavesNothing()
    {
        using (var results = ResultDirectory.Begin(Target))
            File.WriteAllText(Path.Combine(results.WorkingPath, "series.csv"), "half");
        Assert.Empty(Directory.EnumerateFileSystemEntries(Path.Combine(root, "results")));
    }

    [Fact]
    public void Commit_OverAnEarlierResult_ReplacesItWhole()
    {
        Directory.CreateDirectory(Target);
        File.WriteAllText(Path.Combine(Target, "run.json"), "old");
        File.WriteAllText(Path.Combine(Target, "left-over.csv"), "old");
        ResultDirectory.Check(Target, overwrite: true);
        using var results = ResultDirectory.Begin(Target);
        File.WriteAllText(Path.Combine(results.WorkingPath, "run.json"), "new");
        results.Commit();
        Assert.Equal("new", File.ReadAllText(Path.Combine(Target, "run.json")));
        Assert.False(File.Exists(Path.Combine(Target, "left-over.csv")));
        Assert.Single(Directory.EnumerateFileSystemEntries(Path.Combine(root, "results")));
    }

    [Fact]
    public void Check_ExistingResult_AsksForOverwrite()
    {
        Directory.CreateDirectory(Target);
        File.WriteAllText(Path.Combine(Target, "run.json"), "old");
        Assert.Contains("--overwrite", Assert.Throws<InputException>(() => ResultDirectory.Check(Target, overwrite: false)).Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Check_DirectoryOfOtherThings_IsNeverReplaced()
    {
        Directory.CreateDirectory(Target);
        File.WriteAllText(Path.Combine(Target, "thesis.tex"), "mine");
        Assert.Contains("holds no run.json", Assert.Throws<InputException>(() => ResultDirectory.Check(Target, overwrite: true)).Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Check_EmptyOrMissingDirectory_IsFine()
    {
        ResultDirectory.Check(Target, overwrite: false);
        Directory.CreateDirectory(Target);
        ResultDirectory.Check(Target, overwrite: false);
    }

    public void Dispose() => Directory.Delete(root, recursive: true);
}
