using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Tests.CaseFiles;

/// <summary>The gallery's cases. Mutation tried: the step of the kinked trap lengthened to 0.03; its reports no longer lay on whole steps and the test failed.</summary>
public class GalleryTests
{
    public static TheoryData<string> Names => [.. CaseTemplates.Names];

    [Fact]
    public void Names_AreTheFiles()
        => Assert.Equal(["drifting-buoys", "harmonic-trap", "kinked-trap", "ring", "two-well-trap"], CaseTemplates.Names);

    [Theory]
    [MemberData(nameof(Names))]
    public void Case_IsRightAndCommented(string name)
    {
        var text = CaseTemplates.Text(name);
        Assert.StartsWith("# ", text, StringComparison.Ordinal);
        Assert.Contains("\n# What it shows: ", text, StringComparison.Ordinal);
        Assert.EndsWith(".", CaseTemplates.Summary(name), StringComparison.Ordinal);
        var file = CaseFileReader.Parse(text, name + ".toml", CaseTexts.Catalogue);
        Assert.NotEmpty(file.Title);
        Assert.Empty(file.Warnings);
        Assert.True(file.Plan.IsUniform);
        Assert.Equal(["exact", "jko", "split-proximal", "split-gradient"], file.Methods);
        Assert.Equal(["ula", "proximal-ula"], file.Samplers);
    }

    /// <summary>As their comments say: step · mobility · V″ stays below 1 everywhere, so that no map folds and no walker blows up.</summary>
    [Theory]
    [MemberData(nameof(Names))]
    public void Case_StepTimesCurvature_StaysBelowOne(string name)
    {
        var file = CaseFileReader.Parse(CaseTemplates.Text(name), name + ".toml", CaseTexts.Catalogue);
        var grid = file.Grid;
        var (x, y) = (new double[grid.Nx], new double[grid.Y is null ? 0 : grid.Nx]);
        var targets = new double[6][];
        for (var c = 0; c < 6; c++)
            targets[c] = new double[grid.Nx];
        var largest = 0.0;
        for (var row = 0; row < grid.Ny; row++)
        {
            grid.RowCenters(row, x, y);
            file.Problem.Potential.Jet(x, y, new PotentialJet
            {
                Value = targets[0],
                GradientX = targets[1],
                GradientY = grid.Y is null ? default : targets[2],
                HessianXX = targets[3],
                HessianXY = grid.Y is null ? default : targets[4],
                HessianYY = grid.Y is null ? default : targets[5],
            });
            for (var i = 0; i < grid.Nx; i++)
            {
                var (a, b, c) = (targets[3][i], grid.Y is null ? 0 : targets[4][i], grid.Y is null ? 0 : targets[5][i]);
                largest = Math.Max(largest, 0.5 * (a + c) + Math.Sqrt(0.25 * (a - c) * (a - c) + b * b));
            }
        }

        Assert.InRange(file.Plan.Step * file.Problem.Mobility * largest, 0, 0.95);
    }

    [Fact]
    public void Case_FormsThatHaveOne_AreRecognised()
    {
        Assert.IsType<AbsoluteValueForm>(CaseFileReader.Parse(CaseTemplates.Text("kinked-trap"), "k.toml", CaseTexts.Catalogue).Problem.Potential.Form);
        Assert.IsType<QuadraticForm>(CaseFileReader.Parse(CaseTemplates.Text("harmonic-trap"), "k.toml", CaseTexts.Catalogue).Problem.Potential.Form);
    }

    [Fact]
    public void Text_UnknownCase_NamesTheNearest()
    {
        var fault = Assert.Throws<InputException>(() => CaseTemplates.Text("two-wel-trap")).Faults.Single();
        Assert.Equal("Did you mean two-well-trap?", fault.Remedy);
    }
}
