using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Tests.Grids;

public sealed class StartOnGridTests
{
    private static Grid Line(int cells, AxisEnds ends = AxisEnds.Reflecting) => new(new Axis(new Interval(-4, 4, ends), cells));

    private static (double Mean, double Variance) MomentsOf(Density density)
    {
        double mass = 0, first = 0, second = 0;
        for (var i = 0; i < density.Values.Length; i++)
        {
            var x = density.Grid.X.Center(i);
            mass += density.Values[i];
            first += density.Values[i] * x;
            second += density.Values[i] * x * x;
        }

        return (first / mass, second / mass - first * first / mass / mass);
    }

    // Tried: cell averages for a resolved normal density; the variance is then off by h²/12.
    [Fact]
    public void Create_ResolvedGaussian_HasItsMomentsBeyondTheOrderOfTheGrid()
    {
        var density = StartOnGrid.Create(new GaussianStart(0.3, 0.04), Line(200));
        var (mean, variance) = MomentsOf(density);
        Assert.Equal(1, density.Mass, 14);
        Assert.Equal(0.3, mean, 13);
        Assert.Equal(0.04, variance, 13);
    }

    // Tried: centre values for a narrow density; the mass of the cell beside the mean is then missed.
    [Fact]
    public void Create_NarrowGaussian_UsesCellAverages()
    {
        var density = StartOnGrid.Create(new GaussianStart(0.01, 1e-6), Line(80));
        Assert.Equal(1, density.Mass, 14);
        Assert.Equal(1 / density.Grid.CellVolume, density.Values[40], 9);
    }

    [Fact]
    public void Create_CorrelatedNarrowGaussian_AgreesWithAFinerGrid()
    {
        var fine = new Grid(new Axis(new Interval(-1, 1), 1024), new Axis(new Interval(-1, 1), 1024));
        var coarse = new Grid(new Axis(new Interval(-1, 1), 16), new Axis(new Interval(-1, 1), 16));
        var start = new GaussianStart(0.05, 0.01, -0.1, 0.02, 0.008);
        var averages = StartOnGrid.Create(start, fine);
        while (averages.Grid.Nx > coarse.Nx)
            averages = averages.CoarsenedTo(averages.Grid.Halved()!);
        var direct = StartOnGrid.Create(start, coarse);
        for (var i = 0; i < direct.Values.Length; i++)
            Assert.True(Math.Abs(direct.Values[i] - averages.Values[i]) < 2e-3, $"cell {i}: {direct.Values[i]} against {averages.Values[i]}");
    }

    [Fact]
    public void Create_BoxFormula_PlacesTheJumpInsideACell()
    {
        var start = new FunctionStart((x, _, value) =>
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = Math.Abs(x[i]) < 0.55 ? 1 : 0;
        }, "box", IsSmooth: false);
        var density = StartOnGrid.Create(start, Line(80));
        Assert.Equal(0.5, density.Values[45] / density.Values[44], 2);
    }

    [Fact]
    public void Create_GaussianOnACircle_WrapsRound()
    {
        var density = StartOnGrid.Create(new GaussianStart(3.9, 0.09), Line(160, AxisEnds.Periodic));
        // The centres 3.925 and −3.925 lie 0.025 and, round the circle, 0.175 from the mean.
        Assert.Equal(Math.Exp((0.025 * 0.025 - 0.175 * 0.175) / 0.18), density.Values[1] / density.Values[158], 12);
        Assert.Equal(1, density.Mass, 14);
    }

    [Fact]
    public void Create_SamplesOutsideTheWalls_CountsThoseInside()
    {
        var density = StartOnGrid.Create(new SamplesStart([-3.99, -3.99, 2.01, 7], null, "made by hand"), Line(8));
        Assert.Equal(2.0 / 3, density.Values[0], 14);
        Assert.Equal(1.0 / 3, density.Values[6], 14);
    }

    [Theory]
    [InlineData(-1.0, "not negative")]
    [InlineData(double.NaN, "not a number")]
    [InlineData(0.0, "no mass")]
    public void Create_UnusableFormula_SaysWhatAndWhere(double value, string fragment)
    {
        var start = new FunctionStart((x, _, target) => target.Fill(value), "made by hand");
        var exception = Assert.Throws<InputException>(() => StartOnGrid.Create(start, Line(8)));
        Assert.Contains(fragment, exception.Message, StringComparison.Ordinal);
    }
}
