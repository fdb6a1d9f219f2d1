using FlowSolver.Foundation;

namespace FlowSolver.Cli;

/// <summary>
/// A result directory that appears whole or not at all: files are written to a sibling whose name says that it is partial, and the sibling is
/// renamed into place at the end. Dispose without <see cref="Commit"/> removes the sibling.
/// </summary>
internal sealed class ResultDirectory : IDisposable
{
    private const string Mark = "run.json";
    private readonly string target;
    private bool committed;

    private ResultDirectory(string target, string workingPath)
    {
        this.target = target;
        WorkingPath = workingPath;
    }

    /// <summary>Where to write until <see cref="Commit"/>.</summary>
    public string WorkingPath { get; }

    /// <summary>Checks, before anything is computed, that the target can be used; writes nothing.</summary>
    /// <exception cref="InputException">The target exists and may not be replaced.</exception>
    public static void Check(string target, bool overwrite)
    {
        if (File.Exists(target))
            throw new InputException($"The output {target} is a file; it must be a directory that does not exist yet. Choose another with --out.");
        if (!Directory.Exists(target) || !Directory.EnumerateFileSystemEntries(target).Any())
            return;
        if (!overwrite)
            throw new InputException($"The output directory {target} exists already. Add --overwrite to replace it, or choose another with --out.");
        if (!File.Exists(Path.Combine(target, Mark)))
            throw new InputException($"The output directory {target} holds no {Mark}, so it is no earlier result and is not replaced. Choose another with --out.");
    }

    /// <summary>Creates the sibling.</summary>
    public static ResultDirectory Begin(string target)
    {
        var full = Path.TrimEndingDirectorySeparator(Path.GetFullPath(target));
        var working = $"{full}.partial-{Environment.ProcessId}";
        Directory.CreateDirectory(Path.GetDirectoryName(full) ?? ".");
        Directory.CreateDirectory(working);
        return new ResultDirectory(full, working);
    }

    /// <summary>Puts the result into place, replacing an earlier one.</summary>
    public void Commit()
    {
        if (Directory.Exists(target))
        {
            var old = $"{target}.old-{Environment.ProcessId}";
            Directory.Move(target, old);
            Directory.Move(WorkingPath, target);
            committed = true;
            Directory.Delete(old, recursive: true);
            return;
        }

        Directory.Move(WorkingPath, target);
        committed = true;
    }

    /// <inheritdoc/>
    public void Dispose()
    {
        if (!committed && Directory.Exists(WorkingPath))
            Directory.Delete(WorkingPath, recursive: true);
    }
}
