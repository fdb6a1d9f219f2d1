using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Tests.CaseFiles;

/// <summary>
/// Right case files. Mutation tried: the default of the mobility in the table of keys changed to 2; the golden test failed. Mutation tried: deviation
/// taken for variance; the same test failed.
/// </summary>
public class CaseFileReaderTests
{
    [Fact]
    public void Parse_OneDimension_GivesTheProblem()
    {
        var file = CaseTexts.Read(CaseTexts.Line);
        Assert.Equal("t", file.Title);
        Assert.Equal("case", file.Name);
        Assert.Equal("case.toml", file.Path);
        Assert.Equal(1, file.Problem.Dimension);
        Assert.Equal(new Axis(new Interval(-2, 2), 64), file.Grid.X);
        Assert.Null(file.Grid.Y);
        Assert.Equal(file.Grid.X.Interval, file.Problem.Domain.X);
        Assert.Equal("(x^2 - a)^2 + b*x", file.Problem.Potential.Description);
        Assert.Equal((1.21 - 1) * (1.21 - 1) - 0.11, file.Problem.Potential.ValueAt(-1.1), 1e-15);
        Assert.Equal(0.4, file.Problem.Temperature);
        Assert.Equal(1.0, file.Problem.Mobility);
        var start = Assert.IsType<GaussianStart>(file.Problem.Start);
        Assert.Equal(-1, start.MeanX);
        Assert.Equal(0.04, start.VarianceX, 1e-17);
        Assert.Equal(11, file.Plan.ReportTimes.Count);
        Assert.Equal(1.0, file.Plan.ReportTimes[^1]);
        Assert.Equal(50, file.Plan.TotalSteps);
        Assert.True(file.Plan.IsUniform);
        Assert.Equal(["exact", "jko"], file.Methods);
        Assert.Equal(["ula"], file.Samplers);
        Assert.Equal(1000, file.Walkers);
        Assert.Equal(1UL, file.Seed);
        Assert.Null(file.Labels.Length);
        Assert.Equal(1e-3, file.Tolerances.DualGap);
        Assert.Empty(file.Warnings);
    }

    [Fact]
    public void Parse_TwoDimensions_GivesTheProblem()
    {
        var file = CaseTexts.Read(CaseTexts.Plane);
        Assert.Equal(2, file.Problem.Dimension);
        Assert.Equal(new Axis(new Interval(-1.5, 1.5), 24), file.Grid.Y);
        Assert.Equal(new GaussianStart(-1, 0.05, 0.2, 0.04, 0.01), file.Problem.Start);
        Assert.Equal(31, file.Plan.ReportTimes.Count);
        Assert.Equal("", file.Title);
        Assert.Equal(1.0, file.Problem.Mobility);
        Assert.Empty(file.Samplers);
        Assert.Equal(100000, file.Walkers);
        Assert.Equal(["The reports do not all lie on whole steps: steps are shortened so that each report is met."], file.Warnings);
    }

    private const string GoldenResolved = """
        title = "Grüße \"quoted\""
        [domain.x]
        from = -1
        to = 3
        cells = 10
        ends = "periodic"
        [energy]
        potential = "k*cos(pi*x/2)"
        temperature = 0.25
        mobility = 2
        constants = { k = 1.5 }
        [start]
        density = "1 + step(x)"
        [time]
        until = 2
        step = 0.5
        at = [0.5, 1]
        [methods]
        flow = ["exact"]
        [ensemble]
        samplers = []
        walkers = 100000
        seed = 9
        gradient_variance = 1
        decrease_after = 10
        decrease_exponent = 0.5
        [tolerances]
        dual_gap = 1e-07
        [labels]
        length = "µm"
        energy = ""
        time = ""

        """;

    /// <summary>Dotted keys, sub-tables, comments, multi-line strings, whole numbers for numbers: all of TOML that a case may use.</summary>
    [Fact]
    public void Parse_EveryFormOfToml_GivesTheResolvedText()
    {
        const string text = """"
            # a comment
            title = 'Grüße "quoted"'
            domain.x.from = -1
            domain.x.to = 3     # another
            [domain.x]
            cells = 0xA
            ends = "periodic"
            [energy]
            potential = """
            k*cos(pi*x/2)"""
            temperature = 25e-2
            mobility = 2
            [energy.constants]
            k = 1.5
            [start]
            density = "1 + step(x)"
            [time]
            until = 2
            step = 0.5
            at = [
              0.5,
              1,
            ]
            [ensemble]
            seed = 9
            [tolerances]
            dual_gap = 1e-7
            [labels]
            length = "µm"
            """";
        // The header [domain.x] after dotted keys would define the table twice in TOML; as a case that is a fault.
        Assert.Throws<InputException>(() => CaseTexts.Read(text.Replace("domain.x.from = -1", "domain.x = { from = -1 }", StringComparison.Ordinal)));
        var file = CaseTexts.Read(text);
        Assert.Equal(GoldenResolved, file.ResolvedText);
        Assert.Equal(AxisEnds.Periodic, file.Grid.X.Interval.Ends);
        Assert.Equal([0, 0.5, 1, 2], file.Plan.ReportTimes);
        var start = Assert.IsType<FunctionStart>(file.Problem.Start);
        Assert.False(start.IsSmooth);
        Assert.Equal("µm", file.Labels.Length);
        Assert.Equal(1e-7, file.Tolerances.DualGap);
        Assert.Equal(2.0, (double)file.ResolvedValues["time"]!["until"]!);
        Assert.Equal(1.5, (double)file.ResolvedValues["energy"]!["constants"]!["k"]!);
    }

    [Fact]
    public void ResolvedText_ReadAgain_GivesTheSame()
    {
        foreach (var text in new[] { CaseTexts.Line, CaseTexts.Plane, GoldenResolved })
        {
            var resolved = CaseTexts.Read(text).ResolvedText;
            Assert.Equal(resolved, CaseTexts.Read(resolved).ResolvedText);
        }
    }

    [Fact]
    public void Parse_AnyNewLine_CountsTheSameLines()
    {
        var text = CaseTexts.Line.Replace("seed = 1", "sed = 1", StringComparison.Ordinal).ReplaceLineEndings("\r\n");
        Assert.Equal(20, Assert.Throws<InputException>(() => CaseTexts.Read(text)).Faults.Single().Line);
    }

    [Theory]
    [InlineData("cells = 64", "cells = 65", "only an even number from 8 on")]
    [InlineData("b = 0.1", "b = 0.1, c = 2.0", "The constant c is not used by any formula.")]
    [InlineData("cells = 64", "cells = 64, ends = \"periodic\"", "differs by up to 0.4 between the two ends of the periodic axis x")]
    [InlineData("mean = [-1.0]", "mean = [-1.9]", "reaches over a wall of the axis x")]
    [InlineData("deviation = [0.2]", "deviation = [0.01]", "narrower than a cell of the axis x")]
    [InlineData("step = 0.02", "step = 0.03", "steps are shortened")]
    public void Parse_UsableButDoubtful_Warns(string find, string replacement, string part)
        => Assert.Contains(part, Assert.Single(CaseTexts.Read(CaseTexts.With(CaseTexts.Line, find, replacement)).Warnings), StringComparison.Ordinal);

    [Fact]
    public void Parse_PotentialThatWraps_DoesNotWarn()
    {
        var text = CaseTexts.Line.Replace("(x^2 - a)^2 + b*x", "a*cos(pi*x) + b*cos(pi*x/2)^2", StringComparison.Ordinal).Replace("cells = 64", "cells = 64, ends = \"periodic\"", StringComparison.Ordinal);
        Assert.Empty(CaseTexts.Read(text).Warnings);
    }

    [Fact]
    public void Parse_StartFromSamples_ReadsTheFileBesideTheCase()
    {
        var folder = Directory.CreateTempSubdirectory("flowsolver-test-");
        try
        {
            File.WriteAllText(Path.Combine(folder.FullName, "s.csv"), "x\n-0.5\n0.25\n7\n");
            File.WriteAllText(Path.Combine(folder.FullName, "broken.csv"), "x\n-0.5\nzero\n");
            File.WriteAllText(Path.Combine(folder.FullName, "outside.csv"), "x\n9\n");
            File.WriteAllText(Path.Combine(folder.FullName, "times.csv"), "x,time\n0,1\n0,2\n");
            CaseFile Read(string name) => CaseFileReader.Parse(
                CaseTexts.With(CaseTexts.Line, "gaussian = { mean = [-1.0], deviation = [0.2] }", $"samples = \"{name}\""), Path.Combine(folder.FullName, "c.toml"), CaseTexts.Catalogue);
            var file = Read("s.csv");
            Assert.Equal([-0.5, 0.25, 7], Assert.IsType<SamplesStart>(file.Problem.Start).X);
            Assert.Equal("1 of 3 start samples lie outside the domain and are left out.", Assert.Single(file.Warnings));
            var broken = Assert.Throws<InputException>(() => Read("broken.csv")).Faults.Single();
            Assert.Equal(3, broken.Line);
            Assert.Equal("start.samples", broken.Key);
            Assert.EndsWith("broken.csv", broken.File, StringComparison.Ordinal);
            Assert.Contains("x was \"zero\" in row 2", broken.Message, StringComparison.Ordinal);
            Assert.Contains("outside the domain", Assert.Throws<InputException>(() => Read("outside.csv")).Message, StringComparison.Ordinal);
            Assert.Contains("of several times", Assert.Throws<InputException>(() => Read("times.csv")).Message, StringComparison.Ordinal);
        }
        finally
        {
            folder.Delete(recursive: true);
        }
    }

    /// <summary>The table of keys is what is read: its examples are right values, its defaults are of their kind, its tables are all there.</summary>
    [Fact]
    public void Keys_ExamplesAndDefaults_AreRight()
    {
        foreach (var key in CaseKeys.All)
        {
            Assert.Contains(CaseKeys.Tables, table => table.Path == key.Table);
            Assert.EndsWith(".", key.Meaning, StringComparison.Ordinal);
            foreach (var literal in new[] { key.Example, key.Default })
            {
                if (literal is null)
                    continue;
                var faults = new List<InputFault>();
                var text = (key.Table.Length == 0 ? "" : $"[{key.Table}]\n") + $"{key.Name} = {literal}\n";
                _ = new CaseValues(CaseTree.Parse(text, "k", faults)!, "k", faults);
                Assert.DoesNotContain(faults, fault => fault.Key == key.Path && !fault.Message.Contains("was not given", StringComparison.Ordinal));
            }

            foreach (var other in key.Excludes)
                Assert.True(CaseKeys.Find(other) is not null || CaseKeys.FindTable(other) is not null, other);
        }

        Assert.Equal(CaseKeys.All.Count, CaseKeys.All.Select(key => key.Path).Distinct().Count());
        Assert.All(CaseLimits.All, limit => Assert.True(limit.Most > 0));
    }
}
