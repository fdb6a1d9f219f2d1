using FlowSolver.Cli.CaseFiles;

namespace FlowSolver.Tests.CaseFiles;

/// <summary>Right cases that tests read or break, and a catalogue of names that does not depend on which methods there are.</summary>
internal static class CaseTexts
{
    public static MethodCatalogue Catalogue { get; } = new(
        ["exact", "jko", "line-only", "split-proximal", "split-gradient"], name => name == "line-only" ? [1] : [1, 2], ["ula", "proximal-ula"]);

    /// <summary>One dimension. Tests count its lines.</summary>
    public const string Line = """
        title = "t"
        [domain]
        x = { from = -2.0, to = 2.0, cells = 64 }
        [energy]
        potential = "(x^2 - a)^2 + b*x"
        temperature = 0.4
        mobility = 1.0
        constants = { a = 1.0, b = 0.1 }
        [start]
        gaussian = { mean = [-1.0], deviation = [0.2] }
        [time]
        until = 1.0
        step = 0.02
        reports = 11
        [methods]
        flow = ["exact", "jko"]
        [ensemble]
        samplers = ["ula"]
        walkers = 1000
        seed = 1

        """;

    /// <summary>Two dimensions. Tests count its lines.</summary>
    public const string Plane = """
        [domain]
        x = { from = -2.0, to = 2.0, cells = 32 }
        y = { from = -1.5, to = 1.5, cells = 24 }
        [energy]
        potential = "(x^2 - 1)^2 + y^2"
        temperature = 0.5
        [start]
        gaussian = { mean = [-1.0, 0.2], covariance = [[0.05, 0.01], [0.01, 0.04]] }
        [time]
        until = 1.0
        step = 0.02
        [methods]
        flow = ["exact"]

        """;

    public static CaseFile Read(string text) => CaseFileReader.Parse(text, "case.toml", Catalogue);

    /// <summary>The text with one place changed; the place must be there exactly once.</summary>
    public static string With(string text, string find, string replacement)
    {
        var at = text.IndexOf(find, StringComparison.Ordinal);
        Assert.True(at >= 0 && text.IndexOf(find, at + 1, StringComparison.Ordinal) < 0, $"\"{find}\" must occur once.");
        return text[..at] + replacement + text[(at + find.Length)..];
    }
}
