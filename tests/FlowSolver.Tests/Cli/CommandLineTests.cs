using System.Diagnostics;
using System.Globalization;
using FlowSolver.Cli;

namespace FlowSolver.Tests.Cli;

/// <summary>The command as a user meets it: statuses, messages, files. Runs in this process but for the tests that must stop it from outside.</summary>
public sealed class CommandLineTests : IDisposable
{
    private const string Quick = """
        title = "quick trap"
        [domain]
        x = { from = -3, to = 3, cells = 64 }
        [energy]
        potential = "x^4/4 - x^2/2"
        temperature = 0.5
        [start]
        gaussian = { mean = [-0.8], deviation = [0.4] }
        [time]
        until = 0.4
        step = 0.02
        reports = 3
        [methods]
        flow = ["exact", "split-proximal", "split-gradient"]
        [ensemble]
        samplers = ["ula", "proximal-ula"]
        walkers = 3000
        """;

    // Long enough to be stopped anywhere in it.
    private static readonly string Slow = Quick
        .Replace("cells = 64", "cells = 4096", StringComparison.Ordinal)
        .Replace("until = 0.4", "until = 40", StringComparison.Ordinal)
        .Replace("reports = 3", "reports = 401", StringComparison.Ordinal);

    private readonly string root = Directory.CreateTempSubdirectory("flowsolver-test-").FullName;

    private string Case(string text, string name = "trap")
    {
        var path = Path.Combine(root, name + ".toml");
        File.WriteAllText(path, text);
        return path;
    }

    private static (int Status, string Output, string Error) Flow(params string[] arguments)
    {
        using var output = new StringWriter(CultureInfo.InvariantCulture);
        using var error = new StringWriter(CultureInfo.InvariantCulture);
        var status = Program.Run(arguments, output, error);
        return (status, output.ToString(), error.ToString());
    }

    [Fact]
    public void Run_QuickCase_WritesEverythingThatTheContractNames()
    {
        var target = Path.Combine(root, "out");
        var (status, output, error) = Flow("run", Case(Quick), "--out", target, "--quiet");
        Assert.True(status == ExitStatus.Done, error);
        foreach (var file in new[] { "series.csv", "steps.csv", "budget.csv", "density.csv", "density.h5", "run.json", "report.html", "figures/distance.svg" })
            Assert.True(File.Exists(Path.Combine(target, file)), file);
        Assert.Contains("split-proximal", output, StringComparison.Ordinal);
        var header = File.ReadLines(Path.Combine(target, "series.csv")).First();
        Assert.StartsWith("time,method,kind,mass,mean_x,var_x,entropy,free_energy,relative_entropy,fisher_information,w2_exact,w2_exact_low,w2_exact_high,tv_exact", header, StringComparison.Ordinal);
        foreach (var table in Directory.EnumerateFiles(target, "*.csv"))
            Assert.DoesNotContain("NaN", File.ReadAllText(table), StringComparison.OrdinalIgnoreCase);
        // Both samplers have a law on the grid, so every row of the budget can be split.
        Assert.All(File.ReadLines(Path.Combine(target, "budget.csv")).Skip(1), line => Assert.NotEqual("", line.Split(',')[3]));
    }

    // Tried: summing per-thread partial sums in the order in which threads end; the bytes then differ between runs.
    [Fact]
    public void Run_AnyThreads_GivesTheSameBytes()
    {
        var path = Case(Quick);
        foreach (var threads in new[] { "1", "2", "3" })
            Assert.Equal(ExitStatus.Done, Flow("run", path, "--out", Path.Combine(root, threads), "--threads", threads, "--quiet").Status);
        foreach (var table in new[] { "series.csv", "steps.csv", "budget.csv", "density.csv" })
        {
            var one = File.ReadAllBytes(Path.Combine(root, "1", table));
            Assert.Equal(one, File.ReadAllBytes(Path.Combine(root, "2", table)));
            Assert.Equal(one, File.ReadAllBytes(Path.Combine(root, "3", table)));
        }
    }

    [Fact]
    public void Run_AnotherSeed_ChangesTheEnsemblesOnly()
    {
        var path = Case(Quick);
        Flow("run", path, "--out", Path.Combine(root, "a"), "--quiet");
        Flow("run", path, "--out", Path.Combine(root, "b"), "--seed", "2", "--quiet");
        Assert.Equal(File.ReadAllBytes(Path.Combine(root, "a", "density.csv")), File.ReadAllBytes(Path.Combine(root, "b", "density.csv")));
        Assert.NotEqual(File.ReadAllBytes(Path.Combine(root, "a", "budget.csv")), File.ReadAllBytes(Path.Combine(root, "b", "budget.csv")));
    }

    [Fact]
    public void Run_ExistingResult_IsRefusedWithoutOverwrite()
    {
        var (path, target) = (Case(Quick), Path.Combine(root, "out"));
        Flow("run", path, "--out", target, "--quiet");
        var before = File.GetLastWriteTimeUtc(Path.Combine(target, "run.json"));
        var (status, _, error) = Flow("run", path, "--out", target, "--quiet");
        Assert.Equal(ExitStatus.BadInput, status);
        Assert.Contains("--overwrite", error, StringComparison.Ordinal);
        Assert.Equal(before, File.GetLastWriteTimeUtc(Path.Combine(target, "run.json")));
        Assert.Equal(ExitStatus.Done, Flow("run", path, "--out", target, "--overwrite", "--quiet").Status);
    }

    // An explicit sampler far beyond its stability limit: the run says so, keeps the flows, marks what cannot be trusted.
    [Fact]
    public void Run_SamplerBlowsUp_EndsWithStatusThreeAndKeepsTheRest()
    {
        var steep = Quick.Replace("x^4/4 - x^2/2", "20*x^4", StringComparison.Ordinal).Replace("\"split-gradient\"", "\"split-proximal\"", StringComparison.Ordinal)
            .Replace("\"exact\", \"split-proximal\", \"split-proximal\"", "\"exact\", \"split-proximal\"", StringComparison.Ordinal)
            .Replace("step = 0.02", "step = 0.2", StringComparison.Ordinal).Replace("from = -3, to = 3", "from = -300, to = 300", StringComparison.Ordinal);
        var target = Path.Combine(root, "out");
        var (status, _, error) = Flow("run", Case(steep), "--out", target, "--quiet");
        Assert.True(status == ExitStatus.NotTrusted, $"status {status}: {error}");
        Assert.Contains("not trusted: ula", error, StringComparison.Ordinal);
        Assert.Contains("exact", File.ReadAllText(Path.Combine(target, "series.csv")), StringComparison.Ordinal);
    }

    [Theory]
    [InlineData("rum", "did you mean \"run\"")]
    [InlineData("run", "'CASE' missing")]
    [InlineData("run no-such-case.toml", "does not exist")]
    [InlineData("run no-such-case.toml --treads 2", "did you mean \"--threads\"")]
    [InlineData("check no-such-case.toml", "does not exist")]
    [InlineData("converge no-such-case.toml", "'--vary' is required")]
    [InlineData("converge no-such-case.toml --vary width", "--vary was \"width\"")]
    [InlineData("new trap --from two-well-tarp", "did you mean \"two-well-trap\"")]
    [InlineData("gather nowhere elsewhere --out comparison-that-is-not-made.html", "nowhere")]
    public void Arguments_Wrong_SayWhatWouldDo(string line, string fragment)
    {
        var (status, output, error) = Flow(line.Split(' '));
        Assert.Equal(ExitStatus.BadInput, status);
        Assert.Empty(output);
        Assert.Contains(fragment, error, StringComparison.Ordinal);
        Assert.DoesNotContain("   at ", error, StringComparison.Ordinal);
    }

    [Theory]
    [InlineData("0", "--threads was 0")]
    [InlineData("two", "two")]
    public void Threads_Wrong_AreRefused(string threads, string fragment)
    {
        var (status, _, error) = Flow("run", Case(Quick), "--out", Path.Combine(root, "out"), "--threads", threads, "--quiet");
        Assert.Equal(ExitStatus.BadInput, status);
        Assert.Contains(fragment, error, StringComparison.Ordinal);
        Assert.False(Directory.Exists(Path.Combine(root, "out")));
    }

    [Fact]
    public void Run_BadCase_LeavesNothingBehind()
    {
        var (status, _, error) = Flow("run", Case(Quick.Replace("temperature = 0.5", "temperature = -1", StringComparison.Ordinal)), "--out", Path.Combine(root, "out"), "--quiet");
        Assert.Equal(ExitStatus.BadInput, status);
        Assert.Contains("trap.toml:6: energy.temperature", error, StringComparison.Ordinal);
        Assert.Equal(["trap.toml"], Directory.EnumerateFileSystemEntries(root).Select(Path.GetFileName));
    }

    [Fact]
    public void Check_QuickCase_SaysWhatItUnderstood()
    {
        var (status, output, error) = Flow("check", Case(Quick));
        Assert.True(status == ExitStatus.Done, error);
        foreach (var part in new[] { "x^4/4 - x^2/2", "64 cells", "20 steps of 0.02", "unique JKO step", "below 1", "3000 walkers" })
            Assert.Contains(part, output, StringComparison.Ordinal);
    }

    [Fact]
    public void Converge_TwoMethods_PrintsTheTableThatItWrites()
    {
        var target = Path.Combine(root, "orders");
        var (status, output, error) = Flow("converge", Case(Quick.Replace("\"exact\", ", "", StringComparison.Ordinal)), "--vary", "step", "--levels", "3", "--out", target, "--quiet");
        Assert.True(status == ExitStatus.Done, error);
        Assert.Equal(File.ReadAllText(Path.Combine(target, "orders.csv")), output);
        foreach (var file in new[] { "orders.md", "orders.tex", "report.html", "figures/convergence.svg" })
            Assert.True(File.Exists(Path.Combine(target, file)), file);
        Assert.False(File.Exists(target + ".unfinished"));
    }

    [Fact]
    public void Audit_RightAndWrongSamples_EndWithTheVerdictsStatus()
    {
        var path = Case(Quick.Replace("x^4/4 - x^2/2", "x^2", StringComparison.Ordinal));
        // Equilibrium of V = x² at T = 1/2 is a normal density of variance 1/4; quantiles of it make samples without luck.
        var right = Path.Combine(root, "right.csv");
        File.WriteAllLines(right, ["x", .. Enumerable.Range(0, 4000).Select(k => (0.5 * MathNet.Numerics.Distributions.Normal.InvCDF(0, 1, (k + 0.5) / 4000)).ToString("R", CultureInfo.InvariantCulture))]);
        var wrong = Path.Combine(root, "wrong.csv");
        File.WriteAllLines(wrong, ["x", .. Enumerable.Range(0, 4000).Select(k => (0.6 * MathNet.Numerics.Distributions.Normal.InvCDF(0, 1, (k + 0.5) / 4000)).ToString("R", CultureInfo.InvariantCulture))]);
        var (status, output, error) = Flow("audit", path, "--samples", right, "--out", Path.Combine(root, "a"), "--quiet");
        Assert.True(status == ExitStatus.Done, error);
        Assert.StartsWith("samples,time,count,w2,noise_w2_mean,noise_w2_p95,p_value,verdict", output, StringComparison.Ordinal);
        (status, output, error) = Flow("audit", path, "--samples", wrong, "--time", "equilibrium", "--out", Path.Combine(root, "b"), "--quiet");
        Assert.True(status == ExitStatus.Differs, error);
        Assert.Contains("temperature", output, StringComparison.Ordinal);
        Assert.Equal(output, File.ReadAllText(Path.Combine(root, "b", "audit.csv")));
        Assert.Equal(ExitStatus.BadInput, Flow("audit", path, "--samples", wrong, "--samples", right, "--time", "1", "--out", Path.Combine(root, "c"), "--quiet").Status);
        Assert.False(Directory.Exists(Path.Combine(root, "c")));
    }

    [Fact]
    public void Relax_QuickCase_PrintsEquilibriumFirstThenTheGap()
    {
        var (status, output, error) = Flow("relax", Case(Quick), "--modes", "2", "--out", Path.Combine(root, "out"), "--quiet");
        Assert.True(status == ExitStatus.Done, error);
        var lines = output.Split('\n', StringSplitOptions.RemoveEmptyEntries);
        Assert.StartsWith("mode,rate,timescale", lines[0], StringComparison.Ordinal);
        Assert.StartsWith("0,0,,", lines[1], StringComparison.Ordinal);
        // V = x⁴/4 − x²/2 at T = 1/2: 0.4229446 (sinc collocation; the grid of 64 cells and walls at ±3 leave an error of a few parts in a thousand).
        Assert.InRange(double.Parse(lines[2].Split(',')[1], CultureInfo.InvariantCulture), 0.42, 0.426);
    }

    [Fact]
    public void Suggest_Harmonic_FindsStepsThatKeepTheBias()
    {
        var (status, output, error) = Flow("suggest", Case(Quick.Replace("x^4/4 - x^2/2", "x^2", StringComparison.Ordinal)), "--bias", "0.02", "--methods", "split-proximal", "ula", "--out", Path.Combine(root, "out"), "--quiet");
        Assert.True(status == ExitStatus.Done, error);
        Assert.StartsWith("method,largest_step,stationary_bias_w2,transient_bias_w2", output, StringComparison.Ordinal);
        foreach (var cells in output.Split('\n', StringSplitOptions.RemoveEmptyEntries).Skip(1).Select(line => line.Split(',')))
        {
            Assert.InRange(double.Parse(cells[1], CultureInfo.InvariantCulture), 1e-3, 1);
            Assert.InRange(double.Parse(cells[2], CultureInfo.InvariantCulture), 0, 0.02);
            Assert.InRange(double.Parse(cells[3], CultureInfo.InvariantCulture), 0, 0.02);
        }
    }

    // Three ways to stop a process from outside, at several moments: whatever stands under the result's name afterwards must be whole.
    [SkippableTheory]
    [InlineData("INT", 130)]
    [InlineData("TERM", 130)]
    [InlineData("KILL", 137)]
    public void Run_StoppedFromOutside_LeavesNothingThatLooksWhole(string signal, int expected)
    {
        Skip.IfNot(OperatingSystem.IsLinux() || OperatingSystem.IsMacOS(), "Signals are sent with kill.");
        var path = Case(Slow);
        foreach (var wait in new[] { 700, 1500 })
        {
            var target = Path.Combine(root, FormattableString.Invariant($"{signal}-{wait}"));
            using var process = Process.Start(new ProcessStartInfo("dotnet", [typeof(Program).Assembly.Location, "run", path, "--out", target, "--quiet"])
            {
                RedirectStandardError = true,
                RedirectStandardOutput = true,
            })!;
            Thread.Sleep(wait);
            Process.Start("kill", [$"-{signal}", process.Id.ToString(CultureInfo.InvariantCulture)])!.WaitForExit();
            Assert.True(process.WaitForExit(60000));
            Assert.False(File.Exists(Path.Combine(target, "run.json")), $"a result after {signal} at {wait} ms");
            Assert.True(process.ExitCode == expected || (signal != "KILL" && process.ExitCode == 128 + (signal == "INT" ? 2 : 15)), $"status {process.ExitCode}: {process.StandardError.ReadToEnd()}");
            var interrupted = target + ".interrupted";
            if (Directory.Exists(interrupted))
                Assert.Contains("interrupted", File.ReadAllText(Path.Combine(interrupted, "run.json")), StringComparison.Ordinal);
        }
    }

    // A file system of 64 KB that is seen by the one process only.
    [SkippableFact]
    public void Run_DiskFull_SaysSoAndLeavesNothing()
    {
        var mount = Path.Combine(root, "small");
        Directory.CreateDirectory(mount);
        Skip.IfNot(OperatingSystem.IsLinux() && File.Exists("/usr/bin/unshare"), "A small file system is made with unshare and mount.");
        using var process = Process.Start(new ProcessStartInfo("/usr/bin/unshare",
            ["-m", "/bin/sh", "-c", "mount -t tmpfs -o size=64k tmpfs \"$2\" || exit 77; dotnet \"$0\" run \"$1\" --out \"$2/out\" --quiet; s=$?; ls -A \"$2\"; exit $s",
                typeof(Program).Assembly.Location, Case(Quick), mount])
        {
            RedirectStandardError = true,
            RedirectStandardOutput = true,
        })!;
        var output = process.StandardOutput.ReadToEnd();
        var error = process.StandardError.ReadToEnd();
        Assert.True(process.WaitForExit(60000));
        Skip.If(process.ExitCode is 77 or 1, "This user may not mount a file system.");
        Assert.True(process.ExitCode == ExitStatus.NotTrusted, $"status {process.ExitCode}: {error}");
        Assert.Contains("could not be written", error, StringComparison.Ordinal);
        Assert.Empty(output);
    }

    public void Dispose() => Directory.Delete(root, recursive: true);
}
