using FlowSolver.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Problems.ClosedForms;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Diagnostics;

/// <summary>Mutations tried and seen to fail: edges upwards left out; factor M·T for 1/(M·T); rates of the wrong end of an edge.</summary>
public class FisherInformationTests
{
    public static TheoryData<AxisEnds, AxisEnds?> Ends => new()
    {
        { AxisEnds.Reflecting, null }, { AxisEnds.Periodic, null }, { AxisEnds.Reflecting, AxisEnds.Periodic }, { AxisEnds.Periodic, AxisEnds.Reflecting },
    };

    private static GridProblem OnGrid(AxisEnds endsX, AxisEnds? endsY)
    {
        var x = new Interval(-2.5, 2.5, endsX);
        if (endsY is null)
            return new GridProblem(new Problem(new PolynomialPotential(0, 0.2, -0.5, 0, 0.25), 0.3, new Domain(x), new GaussianStart(-0.8, 0.1), 1.7), new Grid(new Axis(x, 90)));
        var y = new Interval(-2, 2.2, endsY.Value);
        return new GridProblem(new Problem(new PlanePotential(-0.5, 0.3, 1, 0.5), 0.4, new Domain(x, y), new GaussianStart(-0.6, 0.2, 0.2, 0.3), 1.7),
            new Grid(new Axis(x, 50), new Axis(y, 44)));
    }

    /// <summary>dF/dt = −M·T²·I along the flow on the grid, to rounding: the derivative of F by the chain rule, and by differences along a run.</summary>
    [Theory]
    [MemberData(nameof(Ends))]
    public void Of_AlongTheExactFlow_IsTheRateOfTheFreeEnergy(AxisEnds endsX, AxisEnds? endsY)
    {
        var problem = OnGrid(endsX, endsY);
        var generator = new Generator(problem);
        var (mobility, temperature) = (problem.Problem.Mobility, problem.Problem.Temperature);
        using var run = new ExactFlowScheme().Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
        var change = new double[problem.Grid.CellCount];
        run.Advance(0.05);
        for (var k = 0; k < 6; k++)
        {
            var before = run.Snapshot();
            generator.Apply(before.Values, change);
            var chain = 0.0;
            for (var i = 0; i < change.Length; i++)
                chain += change[i] * (problem.CellPotential[i] + temperature * Math.Log(before.Values[i]));
            chain *= problem.Grid.CellVolume;
            var rate = -mobility * temperature * temperature * FisherInformation.Of(generator, before.Values);
            Assert.Equal(1, chain / rate, 1e-10);

            const double step = 1e-3;
            run.Advance(step);
            var middle = run.Snapshot();
            run.Advance(step);
            var slope = (problem.FreeEnergy(run.Snapshot().Values) - problem.FreeEnergy(before.Values)) / (2 * step);
            var middleRate = -mobility * temperature * temperature * FisherInformation.Of(generator, middle.Values);
            Assert.Equal(1, slope / middleRate, 3e-3);
            run.Advance(0.1);
        }
    }

    [Fact]
    public void Of_Gaussians_ConvergesToClosedForm()
    {
        var form = new OrnsteinUhlenbeck(1.2, 0.5, 1, 0.2);
        var observed = ObservedOrder.Measure([1.0 / 100, 1.0 / 200, 1.0 / 400], size =>
        {
            var interval = form.Support(0);
            var problem = new GridProblem(form.ProblemFrom(interval), new Grid(new Axis(interval, (int)Math.Round(1 / size))));
            var start = StartOnGrid.Create(problem.Problem.Start, problem.Grid);
            return Math.Abs(FisherInformation.Of(new Generator(problem), start.Values) - form.FisherInformation(0));
        });
        observed.AssertFinest(2, 0.05);
        Assert.True(observed.Errors[^1] < 0.01, observed.ToString());
    }

    [Fact]
    public void Of_Equilibrium_IsZero()
    {
        var problem = OnGrid(AxisEnds.Reflecting, AxisEnds.Periodic);
        Assert.InRange(FisherInformation.Of(new Generator(problem), problem.Equilibrium.Values), 0, 1e-24);
    }

    [Fact]
    public void Of_NearEquilibrium_KeepsItsDigits()
    {
        var problem = OnGrid(AxisEnds.Reflecting, null);
        var generator = new Generator(problem);
        double At(double size)
        {
            var values = new double[problem.Grid.CellCount];
            for (var i = 0; i < values.Length; i++)
                values[i] = problem.Equilibrium.Values[i] * (1 + size * Math.Sin(problem.Grid.X.Center(i)));
            return FisherInformation.Of(generator, values) / (size * size);
        }

        Assert.Equal(1, At(1e-6) / At(1e-5), 1e-4);
    }

    [Fact]
    public void Of_DensityWithHoles_IsInfinite()
    {
        var problem = OnGrid(AxisEnds.Reflecting, null);
        var values = new double[90];
        values.AsSpan(30, 20).Fill(1);
        Assert.True(double.IsPositiveInfinity(FisherInformation.Of(new Generator(problem), values)));
    }

    [Fact]
    public void Of_HolesWhereHardlyAnythingIs_IsFinite()
    {
        var problem = OnGrid(AxisEnds.Reflecting, null);
        var generator = new Generator(problem);
        var values = StartOnGrid.Create(problem.Problem.Start, problem.Grid).Values;
        var whole = FisherInformation.Of(generator, values);
        for (var i = 0; i < values.Length; i++)
        {
            if (values[i] < 1e-18)
                values[i] = 0;
        }

        Assert.Equal(1, FisherInformation.Of(generator, values) / whole, 1e-9);
    }

    [Fact]
    public void TotalVariation_DisjointAndShifted_FollowsItsDefinition()
    {
        var grid = new Grid(new Axis(new Interval(0, 1), 10));
        var (a, b) = (new double[10], new double[10]);
        a.AsSpan(0, 5).Fill(2);
        b.AsSpan(5, 5).Fill(2);
        Assert.Equal(1, TotalVariation.Between(new Density(grid, a), new Density(grid, b)), 1e-15);
        Assert.Equal(0, TotalVariation.Between(new Density(grid, a), new Density(grid, a)));
        Assert.Throws<ArgumentException>(() => TotalVariation.Between(new Density(grid, a), new Density(new Grid(new Axis(new Interval(0, 2), 10)), b)));
    }
}
