using System.Diagnostics;
using System.Globalization;
using System.Runtime.InteropServices;

namespace FlowSolver.Benchmarks;

/// <summary>Work that is done twice in one run: by this library and by a script that does the same with general-purpose libraries.</summary>
/// <param name="Name">Short name, as given on the command line and printed by the script.</param>
/// <param name="Description">What is timed, and against what.</param>
/// <param name="LeastRatio">The peer's seconds over ours that is aimed at.</param>
/// <param name="Script">File under <c>peers/</c>. It is called with the folder of the <see cref="PeerFolder"/> as its one argument and prints a line
/// <c>seconds NAME VALUE</c>: the time of the work alone, without start-up and reading.</param>
/// <param name="Ours">Does the work and returns its seconds, warm-up left out. Called before and after the peer; writes what the script reads.</param>
/// <param name="Disagreement">Compares what both sides wrote; null where there is nothing to compare.</param>
/// <param name="PeerThreads">Threads that the peer's linear algebra may use; 0 leaves it its default.</param>
public sealed record PeerRow(
    string Name, string Description, double LeastRatio, string Script, Func<PeerFolder, double> Ours,
    Func<PeerFolder, double>? Disagreement = null, int PeerThreads = 1);

/// <summary>Cost of a unit of work at growing sizes: it should stay flat.</summary>
/// <param name="Name">Short name.</param>
/// <param name="Description">What is timed, and what the unit is.</param>
/// <param name="MostRatio">Largest cost over smallest cost that is aimed at.</param>
/// <param name="Sizes">Sizes, growing, such as cells along an axis.</param>
/// <param name="CostOfUnit">Seconds for one unit of work at a size, warm-up left out.</param>
public sealed record GrowthRow(string Name, string Description, double MostRatio, IReadOnlyList<int> Sizes, Func<int, double> CostOfUnit);

/// <summary>The folder through which both sides of a comparison exchange arrays: raw little-endian doubles, <c>numpy.fromfile(path)</c>.</summary>
/// <param name="Path">The folder.</param>
public sealed record PeerFolder(string Path)
{
    /// <summary>Writes <c>NAME.f64</c>.</summary>
    public void Write(string name, ReadOnlySpan<double> values)
        => File.WriteAllBytes(FileOf(name), MemoryMarshal.AsBytes(values));

    /// <summary>Reads <c>NAME.f64</c>.</summary>
    public double[] Read(string name) => MemoryMarshal.Cast<byte, double>(File.ReadAllBytes(FileOf(name))).ToArray();

    private string FileOf(string name) => System.IO.Path.Combine(Path, name + ".f64");
}

/// <summary>Runs the registered rows of <see cref="PeerRows"/> and prints ratios: <c>-- peers [name…]</c> and <c>-- growth [name…]</c>.</summary>
internal static class PeerComparison
{
    /// <summary>Runs ours, the peer and ours again for each row asked for; all of them when none is named.</summary>
    /// <returns>0 when every row ran or was skipped for want of a peer; 1 when one failed; 2 for an unknown name.</returns>
    public static int RunPeers(IReadOnlyList<string> names)
    {
        if (Select(PeerRows.Peers, row => row.Name, names) is not { } rows)
            return 2;
        var python = FindPython();
        if (python is null)
            Console.WriteLine("skipped: no python3 with numpy and scipy was found (Debian: apt-get install python3-numpy python3-scipy); our own times follow.");
        var status = 0;
        foreach (var row in rows)
        {
            var folder = new PeerFolder(Directory.CreateTempSubdirectory("flowsolver-peer-").FullName);
            try
            {
                Console.WriteLine($"{row.Name}: {row.Description}");
                var before = row.Ours(folder);
                var peer = python is null ? null : RunScript(python, row, folder);
                var after = row.Ours(folder);
                var ours = 0.5 * (before + after);
                Console.WriteLine(Invariant($"  ours    {ours:g5} s  (before {before:g5}, after {after:g5})"));
                if (python is null)
                    continue;
                if (peer is not { } seconds)
                {
                    status = 1;
                    continue;
                }

                Console.WriteLine(Invariant($"  peer    {seconds:g5} s"));
                Console.WriteLine(Invariant($"  ratio   {seconds / ours:f1}  (aim: at least {row.LeastRatio:g3})  {(seconds / ours >= row.LeastRatio ? "reached" : "NOT REACHED")}"));
                if (row.Disagreement is not null)
                    Console.WriteLine(Invariant($"  largest difference of the results {row.Disagreement(folder):g3}"));
            }
            finally
            {
                Directory.Delete(folder.Path, true);
            }
        }

        return status;
    }

    /// <summary>Prints the cost of a unit of work at each size of each row asked for.</summary>
    /// <returns>0, or 2 for an unknown name.</returns>
    public static int RunGrowth(IReadOnlyList<string> names)
    {
        if (Select(PeerRows.Growth, row => row.Name, names) is not { } rows)
            return 2;
        foreach (var row in rows)
        {
            Console.WriteLine($"{row.Name}: {row.Description}");
            double least = double.PositiveInfinity, most = 0;
            foreach (var size in row.Sizes)
            {
                var cost = row.CostOfUnit(size);
                (least, most) = (Math.Min(least, cost), Math.Max(most, cost));
                Console.WriteLine(Invariant($"  {size,6}  {cost:g4} s"));
            }

            Console.WriteLine(Invariant($"  spread {most / least:f2}  (aim: at most {row.MostRatio:g3})  {(most / least <= row.MostRatio ? "reached" : "NOT REACHED")}"));
        }

        return 0;
    }

    /// <summary>Seconds of one call: the least of <paramref name="repeats"/> calls after one that is not counted.</summary>
    public static double Time(int repeats, Action work)
    {
        work();
        var least = double.PositiveInfinity;
        for (var k = 0; k < repeats; k++)
        {
            var start = Stopwatch.GetTimestamp();
            work();
            least = Math.Min(least, Stopwatch.GetElapsedTime(start).TotalSeconds);
        }

        return least;
    }

    private static List<T>? Select<T>(IReadOnlyList<T> rows, Func<T, string> nameOf, IReadOnlyList<string> names)
    {
        var unknown = names.FirstOrDefault(name => !rows.Any(row => nameOf(row) == name));
        if (unknown is not null)
        {
            Console.Error.WriteLine($"The name was {unknown}; it must be one of {string.Join(", ", rows.Select(nameOf))}.");
            return null;
        }

        return [.. rows.Where(row => names.Count == 0 || names.Contains(nameOf(row)))];
    }

    // The system's own interpreter comes first: another one earlier in the path may lack the two packages.
    private static string? FindPython()
    {
        foreach (var candidate in new[] { "/usr/bin/python3", "python3", "python" })
        {
            try
            {
                using var process = Start(candidate, ["-c", "import numpy, scipy"], 0);
                process.StandardOutput.ReadToEnd();
                process.StandardError.ReadToEnd();
                process.WaitForExit();
                if (process.ExitCode == 0)
                    return candidate;
            }
            catch (System.ComponentModel.Win32Exception)
            {
                // Not there; the next candidate may be.
            }
        }

        return null;
    }

    private static double? RunScript(string python, PeerRow row, PeerFolder folder)
    {
        using var process = Start(python, [Path.Combine(AppContext.BaseDirectory, "peers", row.Script), folder.Path], row.PeerThreads);
        var errors = process.StandardError.ReadToEndAsync();
        var lines = process.StandardOutput.ReadToEnd().Split('\n');
        process.WaitForExit();
        foreach (var line in lines)
        {
            var words = line.Split(' ', StringSplitOptions.RemoveEmptyEntries | StringSplitOptions.TrimEntries);
            if (words is ["seconds", var name, var value] && name == row.Name)
                return double.Parse(value, CultureInfo.InvariantCulture);
        }

        Console.WriteLine($"  FAILED: peers/{row.Script} printed no line \"seconds {row.Name} VALUE\" (exit status {process.ExitCode}).");
        Console.WriteLine(errors.Result);
        return null;
    }

    private static Process Start(string program, IReadOnlyList<string> arguments, int threads)
    {
        var start = new ProcessStartInfo(program, arguments) { RedirectStandardOutput = true, RedirectStandardError = true };
        // Settings that pin the linear algebra library to kernels of another machine would slow the peer down.
        start.Environment.Remove("OPENBLAS_CORETYPE");
        start.Environment.Remove("OPENBLAS_L2_SIZE");
        if (threads > 0)
        {
            start.Environment["OMP_NUM_THREADS"] = threads.ToString(CultureInfo.InvariantCulture);
            start.Environment["OPENBLAS_NUM_THREADS"] = threads.ToString(CultureInfo.InvariantCulture);
        }

        return Process.Start(start)!;
    }

    private static string Invariant(FormattableString text) => FormattableString.Invariant(text);
}
