using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;

namespace FlowSolver.Tests.CaseFiles;

/// <summary>
/// Every fault of a case file: its sentence, line and key. Mutation tried: the fault for an unknown key left out; eight rows failed. Mutation tried: the
/// line taken from the table instead of the key; most rows failed.
/// </summary>
public class BrokenCaseTests
{
    public static TheoryData<string, string, string?, int, string> OnTheLine => new()
    {
        // Found text, its replacement, key, line, part of the sentence.
        { "title = \"t\"", "title = 3", "title", 1, "It was 3; it must be text in quotes." },
        { "title = \"t\"", "titel = \"t\"", "titel", 1, "Did you mean title?" },
        { "title = \"t\"", "title = \"t", null, 1, "not TOML" },
        { "title = \"t\"", "title : \"t\"", null, 1, "not TOML" },
        { "title = \"t\"", "title = \"\\ud800\"", null, 1, "not TOML" },
        { "title = \"t\"", "title = \"\ud800\"", null, 1, "surrogate" },
        { "title = \"t\"", "title = \"t\"\ntitle = \"u\"", "title", 2, "given twice; it must stand once. It was first given on line 1." },
        { "[domain]\nx =", "[domian]\nx =", "domian", 2, "Did you mean domain?" },
        { "[domain]\nx = { from = -2.0, to = 2.0, cells = 64 }\n", "", "domain", 1, "The table was not given" },
        { "[domain]\nx = { from = -2.0, to = 2.0, cells = 64 }", "domain = 3", "domain", 2, "It was 3; it must be a table." },
        { "x = { from = -2.0, to = 2.0, cells = 64 }", "x = 3", "domain.x", 3, "It was 3; it must be a table." },
        { "x = { from = -2.0, to = 2.0, cells = 64 }", "", "domain.x", 2, "The table was not given" },
        { "x = { from", "z = { from", "domain.z", 3, "The keys of [domain] are x, y." },
        { "from = -2.0", "from = 2.5", "domain.x.to", 3, "It was 2; it must be above from, which is 2.5." },
        { "from = -2.0", "form = -2.0", "domain.x.form", 3, "Did you mean from?" },
        { "from = -2.0", "from = \"-2\"", "domain.x.from", 3, "It was \"-2\"; it must be a number." },
        { "from = -2.0", "from = nan", "domain.x.from", 3, "It was not a number; it must be a number." },
        { "to = 2.0", "to = inf", "domain.x.to", 3, "It was infinite; it must be a number." },
        { "to = 2.0", "to = true", "domain.x.to", 3, "It was true; it must be a number." },
        { "to = 2.0", "to = 1979-05-27", "domain.x.to", 3, "It was a date; it must be a number." },
        { "from = -2.0, to = 2.0", "from = -1e308, to = 1e308", "domain.x.to", 3, "its length must be finite" },
        { "from = -2.0, to = 2.0", "from = 1e15, to = 1000000000000001.0", "domain.x.to", 3, "cells wider than rounding" },
        { "cells = 64", "cells = 2", "domain.x.cells", 3, "It was 2; it must be a whole number from 4 to 1048576." },
        { "cells = 64", "cells = -5", "domain.x.cells", 3, "It was -5; it must be a whole number" },
        { "cells = 64", "cells = 1048577", "domain.x.cells", 3, "It was 1048577; it must be a whole number from 4 to 1048576." },
        { "cells = 64", "cells = 64.0", "domain.x.cells", 3, "It was 64.0; it must be a whole number" },
        { "cells = 64", "cells = 99999999999999999999", null, 3, "not TOML" },
        { ", cells = 64", "", "domain.x.cells", 3, "The key was not given; it must be a whole number" },
        { "cells = 64", "cells = 64, ends = \"periodical\"", "domain.x.ends", 3, "Did you mean \"periodic\"?" },
        { "cells = 64", "cells = 64, ends = 1", "domain.x.ends", 3, "it must be \"reflecting\" or \"periodic\"." },
        { "potential = ", "potental = ", "energy.potental", 5, "Did you mean potential?" },
        { "potential = ", "potental = ", "energy.potential", 4, "The key was not given; it must be a formula in quotes." },
        { "\"(x^2 - a)^2 + b*x\"", "7", "energy.potential", 5, "It was 7; it must be a formula in quotes." },
        { "+ b*x\"", "+ c*x\"", "energy.potential", 5, "The name c is not known." },
        { "+ b*x\"", "+ b x\"", "energy.potential", 5, "An operator was missing before x" },
        { "+ b*x\"", "+ b*y\"", "energy.potential", 5, "The variable y was used in one dimension" },
        { "+ b*x\"", "+ b*log(x)\"", "energy.potential", 5, "The potential was not a number at x = -2;" },
        { "+ b*x\"", "+ b/x\"", "energy.potential", 5, "at x = 0; it must be finite on the whole domain." },
        { "+ b*x\"", "+ b/(1 + exp(1000*x))\"", "energy.potential", 5, "The slope of the potential was not a number at x = " },
        { "+ b*x\"", "+ b*x)\"", "energy.potential", 5, "closes nothing" },
        { "temperature = 0.4", "temperature = 0", "energy.temperature", 6, "It was 0; it must be a number above 0." },
        { "temperature = 0.4", "temperature = -0.4", "energy.temperature", 6, "It was -0.4; it must be a number above 0." },
        { "temperature = 0.4", "", "energy.temperature", 4, "The key was not given; it must be a number above 0." },
        { "mobility = 1.0", "mobility = 0.0", "energy.mobility", 7, "It was 0.0; it must be a number above 0." },
        { "{ a = 1.0, b = 0.1 }", "{ a = 1.0, b = \"0.1\" }", "energy.constants.b", 8, "It was \"0.1\"; it must be a finite number." },
        { "{ a = 1.0, b = 0.1 }", "{ a = 1.0, b = 0.1, a = 2.0 }", "energy.constants.a", 8, "given twice" },
        { "{ a = 1.0, b = 0.1 }", "{ a = 1.0, b = 0.1, sin = 2.0 }", "energy.constants", 8, "a word of formulas" },
        { "{ a = 1.0, b = 0.1 }", "{ a = 1.0, b = 0.1, \"2a\" = 2.0 }", "energy.constants", 8, "its name must be a letter" },
        { "{ a = 1.0, b = 0.1 }", "[1.0, 0.1]", "energy.constants", 8, "It was a list; it must be a table of names with numbers." },
        { "gaussian = { mean = [-1.0], deviation = [0.2] }", "", "start", 9, "No start was given" },
        { "[start]\ngaussian = { mean = [-1.0], deviation = [0.2] }\n", "", "start", 1, "The table was not given" },
        { "gaussian = {", "density = \"1\"\ngaussian = {", "start.density", 10, "start.density and start.gaussian were both given" },
        { "gaussian = {", "gausian = {", "start.gausian", 10, "Did you mean gaussian?" },
        { "mean = [-1.0]", "mean = -1.0", "start.gaussian.mean", 10, "Write [-1.0]." },
        { "mean = [-1.0]", "mean = [-1.0, 0.0]", "start.gaussian.mean", 10, "It had 2 numbers; it must have 1, one for each axis of the domain." },
        { "mean = [-1.0]", "mean = []", "start.gaussian.mean", 10, "It was an empty list" },
        { "mean = [-1.0]", "mean = [\"-1.0\"]", "start.gaussian.mean", 10, "Entry 1 was \"-1.0\"; it must be a finite number." },
        { "mean = [-1.0]", "mean = [-9.0]", "start.gaussian.mean", 10, "it must lie inside" },
        { "mean = [-1.0], ", "", "start.gaussian.mean", 10, "The key was not given; it must be a list of numbers." },
        { "deviation = [0.2]", "deviation = [0.0]", "start.gaussian.deviation", 10, "Entry 1 was 0; a deviation must be above 0" },
        { "deviation = [0.2]", "deviation = [-0.2]", "start.gaussian.deviation", 10, "Entry 1 was -0.2" },
        { "deviation = [0.2]", "deviation = [0.2, 0.3]", "start.gaussian.deviation", 10, "It had 2 numbers" },
        { ", deviation = [0.2]", "", "start.gaussian", 10, "No width was given" },
        { "deviation = [0.2]", "deviation = [0.2], covariance = [[0.04]]", "start.gaussian.deviation", 10, "both given" },
        { "deviation = [0.2]", "covariance = [[-0.04]]", "start.gaussian.covariance", 10, "The variance was -0.04; it must be above 0." },
        { "deviation = [0.2]", "covariance = [0.04]", "start.gaussian.covariance", 10, "Row 1 was 0.04; it must be a list of numbers." },
        { "gaussian = { mean = [-1.0], deviation = [0.2] }", "density = \"-exp(-x^2)\"", "start.density", 10, "it must be finite and not negative on the whole domain." },
        { "gaussian = { mean = [-1.0], deviation = [0.2] }", "density = \"0*x\"", "start.density", 10, "The start density is 0 everywhere" },
        { "gaussian = { mean = [-1.0], deviation = [0.2] }", "density = \"exp(-x^2\"", "start.density", 10, "never closed" },
        { "gaussian = { mean = [-1.0], deviation = [0.2] }", "samples = \"nowhere.csv\"", "start.samples", 10, "The file nowhere.csv does not exist" },
        { "gaussian = { mean = [-1.0], deviation = [0.2] }", "samples = \"\"", "start.samples", 10, "name of the file was empty" },
        { "until = 1.0\n", "", "time.until", 11, "The key was not given; it must be a number above 0, or time.at must list the times." },
        { "until = 1.0", "until = 0.0", "time.until", 12, "It was 0.0; it must be a number above 0." },
        { "until = 1.0", "until = 4e-324", "time.until", 12, "the times between its reports must be apart" },
        { "step = 0.02\n", "", "time.step", 11, "The key was not given; it must be a number above 0." },
        { "step = 0.02", "step = 1e-9", "time.step", 13, "With a step of 1E-09 there would be 1e+09 steps; there must be at most 10000000." },
        { "step = 0.02", "step = 4e-324", "time.step", 13, "steps; there must be at most 10000000." },
        { "reports = 11", "reports = 1", "time.reports", 14, "It was 1; it must be a whole number from 2 to 10000." },
        { "reports = 11", "reports = 10001", "time.reports", 14, "It was 10001; it must be a whole number from 2 to 10000." },
        { "reports = 11", "reports = 11\nat = [0, 1]", "time.at", 15, "time.at and time.reports were both given" },
        { "reports = 11", "at = [0, 0.5, 0.5]", "time.at", 14, "Entry 3 was 0.5 after 0.5; times must be increasing" },
        { "reports = 11", "at = [-1, 0.5]", "time.at", 14, "Entry 1 was -1; times must be increasing and none below 0." },
        { "reports = 11", "at = [0, 2]", "time.at", 14, "The last time was 2, after until, which is 1" },
        { "until = 1.0\nstep = 0.02\nreports = 11", "step = 0.02\nat = [0]", "time.at", 13, "The only time was 0" },
        { "[\"exact\", \"jko\"]", "[\"exact\", \"jok\"]", "methods.flow", 16, "The method \"jok\" is not known. Did you mean \"jko\"?" },
        { "[\"exact\", \"jko\"]", "[\"exact\", \"ula\"]", "methods.flow", 16, "It is a sampler: name it under ensemble.samplers." },
        { "[\"exact\", \"jko\"]", "[\"exact\", \"exact\"]", "methods.flow", 16, "\"exact\" was listed twice" },
        { "[\"exact\", \"jko\"]", "\"exact\"", "methods.flow", 16, "Write [\"exact\"]." },
        { "[\"exact\", \"jko\"]", "[1]", "methods.flow", 16, "Entry 1 was 1; it must be a name in quotes." },
        { "[\"exact\", \"jko\"]", "[\"something-else-entirely\"]", "methods.flow", 16, "The methods are exact, jko, line-only" },
        { "[\"ula\"]", "[\"uls\"]", "ensemble.samplers", 18, "Did you mean \"ula\"?" },
        { "[\"ula\"]", "[\"jko\"]", "ensemble.samplers", 18, "It is a flow method: name it under methods.flow." },
        { "walkers = 1000", "walkers = 0", "ensemble.walkers", 19, "It was 0; it must be a whole number from 1 to 100000000." },
        { "walkers = 1000", "walkers = 100000001", "ensemble.walkers", 19, "It was 100000001" },
        { "walkers = 1000", "walkers = 1e5", "ensemble.walkers", 19, "Write 100000, without a point." },
        { "seed = 1", "seed = -1", "ensemble.seed", 20, "It was -1; it must be a whole number from 0" },
        { "seed = 1", "temperature = 1", "ensemble.temperature", 20, "Did you mean energy.temperature?" },
        { "seed = 1", "seed = 1\n[tolerances]\ndual_gap = 0", "tolerances.dual_gap", 22, "It was 0; it must be a number above 0." },
        { "seed = 1", "seed = 1\n[tolerance]\ndual_gap = 1", "tolerance", 21, "Did you mean tolerances?" },
        { "seed = 1", "seed = 1\n[labels]\nlength = 1", "labels.length", 22, "It was 1; it must be text in quotes." },
        { "seed = 1", "seed = 1\n[energy]\nmobility = 2.0", "energy", 21, "The table [energy] was given twice; it must stand once. It was first given on line 4." },
        { "seed = 1", "seed = 1\n[[labels]]\n", "labels", 21, "[[labels]] was a list of tables; it must be one table." },
        { "seed = 1", "seed = 1\n[energy.potential]\nx = 1", "energy.potential", 21, "is used as a table here" },
        { "seed = 1", "seed = 1\na.b.c.d.e.f.g.h.i.j = 1", null, 21, "A key had more than 8 parts" },
        { "seed = 1\n", "seed = \"\\", null, 20, "it ended inside quotes." },
        { "seed = 1", "seed = [[[[[[[[[[[[[[[[[[1]]]]]]]]]]]]]]]]]]", null, 20, "nested more than 16 deep" },
    };

    [Theory]
    [MemberData(nameof(OnTheLine))]
    public void Parse_BrokenInOnePlace_NamesLineKeyAndRemedy(string find, string replacement, string? key, int line, string part)
        => AssertFault(CaseTexts.With(CaseTexts.Line, find, replacement), key, line, part);

    public static TheoryData<string, string, string?, int, string> InThePlane => new()
    {
        { "y = { from = -1.5, to = 1.5, cells = 24 }", "y = { from = 1.5, to = -1.5, cells = 24 }", "domain.y.to", 3, "It was -1.5; it must be above from" },
        { "y = { from = -1.5, to = 1.5, cells = 24 }", "y = { from = -1.5, to = 1.5 }", "domain.y.cells", 3, "The key was not given" },
        { "cells = 24", "cells = 5000", "domain.y.cells", 3, "in two dimensions it must be at most 4096." },
        { "cells = 32", "cells = 1048576", "domain.x.cells", 2, "in two dimensions it must be at most 4096." },
        { "y = { from = -1.5, to = 1.5, cells = 24 }\n", "", "energy.potential", 4, "The variable y was used in one dimension" },
        { "y = { from = -1.5, to = 1.5, cells = 24 }\n", "", "start.gaussian.mean", 7, "It had 2 numbers; it must have 1" },
        { "+ y^2\"", "+ sqrt(y)\"", "energy.potential", 5, "The potential was not a number at x = -2, y = -1.5;" },
        { "mean = [-1.0, 0.2]", "mean = [-1.0]", "start.gaussian.mean", 8, "It had 1 number; it must have 2, one for each axis" },
        { "[[0.05, 0.01], [0.01, 0.04]]", "[[0.05, 0.01], [0.02, 0.04]]", "start.gaussian.covariance", 8, "The matrix was not symmetric: its off-diagonal entries were 0.01 and 0.02" },
        { "[[0.05, 0.01], [0.01, 0.04]]", "[[0.05, 0.06], [0.06, 0.04]]", "start.gaussian.covariance", 8, "was not positive definite" },
        { "[[0.05, 0.01], [0.01, 0.04]]", "[[0.05, 0.0], [0.0, 0.0]]", "start.gaussian.covariance", 8, "was not positive definite" },
        { "[[0.05, 0.01], [0.01, 0.04]]", "[[0.05, 0.01]]", "start.gaussian.covariance", 8, "it must have 2 rows of 2" },
        { "[[0.05, 0.01], [0.01, 0.04]]", "[[0.05, 0.01], [0.01]]", "start.gaussian.covariance", 8, "it must have 2 rows of 2" },
        { "[\"exact\"]", "[\"exact\", \"line-only\"]", "methods.flow", 13, "The method line-only does not serve two dimensions; it must be one that does. Those are exact, jko, split-proximal" },
        { "[\"exact\"]", "[]", "methods.flow", 13, "No method and no sampler was named" },
    };

    [Theory]
    [MemberData(nameof(InThePlane))]
    public void Parse_BrokenInThePlane_NamesLineKeyAndRemedy(string find, string replacement, string? key, int line, string part)
        => AssertFault(CaseTexts.With(CaseTexts.Plane, find, replacement), key, line, part);

    private static void AssertFault(string text, string? key, int line, string part)
    {
        var exception = Assert.Throws<InputException>(() => CaseTexts.Read(text));
        var fault = exception.Faults.FirstOrDefault(one => one.Key == key && one.Line == line && one.ToString().Contains(part, StringComparison.Ordinal));
        Assert.True(fault is not null, $"Expected {key} on line {line}: …{part}…\nFound\n{exception.Message}");
        Assert.Equal("case.toml", fault.File);
        Assert.EndsWith(".", fault.Message, StringComparison.Ordinal);
        Assert.StartsWith($"case.toml:{line}: {(key is null ? "" : key + ": ")}", fault.ToString(), StringComparison.Ordinal);
    }

    /// <summary>All faults at once, in the order of the file.</summary>
    [Fact]
    public void Parse_ManyFaults_ListsAllInOrder()
    {
        var text = CaseTexts.Line.Replace("cells = 64", "cells = 3", StringComparison.Ordinal).Replace("temperature = 0.4", "temprature = 0.4", StringComparison.Ordinal)
            .Replace("b*x", "2x", StringComparison.Ordinal).Replace("deviation = [0.2]", "deviation = [0.0]", StringComparison.Ordinal)
            .Replace("step = 0.02", "step = 0", StringComparison.Ordinal).Replace("\"jko\"", "\"jok\"", StringComparison.Ordinal).Replace("seed = 1", "sed = 1", StringComparison.Ordinal);
        var faults = Assert.Throws<InputException>(() => CaseTexts.Read(text)).Faults;
        Assert.Equal(
            ["domain.x.cells", "energy.temperature", "energy.potential", "energy.temprature", "start.gaussian.deviation", "time.step", "methods.flow", "ensemble.sed"],
            faults.Select(fault => fault.Key));
        Assert.Equal(faults.Select(fault => fault.Line).Order(), faults.Select(fault => fault.Line));
    }

    /// <summary>The caret stands under the fault, and the column is that of the file.</summary>
    [Fact]
    public void Parse_FaultInAFormula_ShowsCaretAndColumn()
    {
        var fault = Assert.Throws<InputException>(() => CaseTexts.Read(CaseTexts.With(CaseTexts.Line, "+ b*x\"", "+ b*sni(x)\""))).Faults.Single();
        Assert.Equal("(x^2 - a)^2 + b*sni(x)\n                ^", fault.Detail);
        Assert.Equal("potential = \"(x^2 - a)^2 + b*".Length + 1, fault.Column);
        Assert.Equal("Did you mean sin?", fault.Remedy);
    }

    [Fact]
    public void Read_FileThatIsNone_Refused()
    {
        Assert.Contains("does not exist", Assert.Throws<InputException>(() => CaseFileReader.Read("/nowhere/at-all.toml")).Message, StringComparison.Ordinal);
        Assert.Contains("directory", Assert.Throws<InputException>(() => CaseFileReader.Read(Path.GetTempPath())).Message, StringComparison.Ordinal);
        var file = Path.GetTempFileName();
        try
        {
            File.WriteAllBytes(file, [.. "title = \""u8, 0xFF, 0xFE, .. "\"\n"u8]);
            Assert.Contains("Byte 9 is not UTF-8", Assert.Throws<InputException>(() => CaseFileReader.Read(file)).Message, StringComparison.Ordinal);
            File.WriteAllText(file, new string('#', 1_000_001));
            Assert.Contains("it must have at most 1000000", Assert.Throws<InputException>(() => CaseFileReader.Read(file)).Message, StringComparison.Ordinal);
            File.WriteAllText(file, "");
            Assert.Equal(4, Assert.Throws<InputException>(() => CaseFileReader.Read(file)).Faults.Count);
        }
        finally
        {
            File.Delete(file);
        }
    }
}
