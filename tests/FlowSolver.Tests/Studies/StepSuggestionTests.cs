using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes.Splitting;
using FlowSolver.Studies;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Studies;

public class StepSuggestionTests
{
    /// <summary>
    /// V = λx²/2 from equilibrium: the stationary bias is the larger one and known, √(T/λ)|√ratio − 1|; the step that makes it the bound, by bisection on that formula, is met within the 3 % that the search promises.
    /// </summary>
    [Theory]
    [InlineData("split-gradient")]
    [InlineData("split-proximal")]
    [InlineData("split-strang")]
    [InlineData("split-strang-flow")]
    [InlineData("ula")]
    public void Search_Quadratic_FindsTheStepOfTheFormula(string method)
    {
        const double stiffness = 1.4, temperature = 0.6, bias = 0.01;
        double Ratio(double z) => method switch
        {
            "split-proximal" => (1 + z) * (1 + z) / (1 + z / 2),
            "split-strang" => z / Math.Tanh(z),
            "split-strang-flow" => z / Math.Sinh(z),
            _ => 1 / (1 - z / 2),
        };
        var problem = new Problem(new PolynomialPotential(0, 0, stiffness / 2), temperature, new Domain(new Interval(-4.5, 4.5)), new GaussianStart(0, temperature / stiffness));
        var result = StepSuggestion.Search(problem, new Grid(new Axis(problem.Domain.X, 256)), TimePlan.Even(0.05, 6, 4), bias, WorkerTeam.Alone, [method]);
        var (low, high) = (1e-6, 1.0);
        for (var k = 0; k < 60; k++)
        {
            var middle = 0.5 * (low + high);
            if (Math.Sqrt(temperature / stiffness) * Math.Abs(Math.Sqrt(Ratio(stiffness * middle)) - 1) < bias)
                low = middle;
            else
                high = middle;
        }

        var row = Assert.Single(result.Rows);
        Assert.InRange(row.Suggested!.Step / low, 0.965, 1.002);
        Assert.True(row.Suggested.Worst <= bias);
        Assert.True(row.AtHalf!.Worst < row.Suggested.Worst && row.AtDouble!.Worst > bias);
        Assert.True(result.GridFloor < bias / 20);
        if (method is "split-gradient" or "ula")
            Assert.Equal(2 / stiffness, row.StableStep!.Value, 1e-6);
    }

    /// <summary>Steps to come within ε of equilibrium from the start, on the variance recursion of ULA: the count is exact. Mutation tried: the count one stride too far.</summary>
    [Fact]
    public void Search_Quadratic_CountsStepsToEquilibrium()
    {
        const double stiffness = 1, temperature = 0.5;
        var problem = new Problem(new PolynomialPotential(0, 0, stiffness / 2), temperature, new Domain(new Interval(-5, 5)), new GaussianStart(1.5, 0.04));
        var result = StepSuggestion.Search(problem, new Grid(new Axis(problem.Domain.X, 256)), TimePlan.Even(0.05, 4, 4), 0.02, WorkerTeam.Alone, ["split-gradient", "split-proximal"], 0.05);
        var row = result.Rows[0];
        var (mean, variance, steps) = (1.5, 0.04, 0);
        while (Math.Sqrt(mean * mean + Math.Pow(Math.Sqrt(variance) - Math.Sqrt(temperature / stiffness), 2)) > 0.05)
        {
            var factor = 1 - stiffness * row.Suggested!.Step;
            (mean, variance, steps) = (factor * mean, factor * factor * variance + 2 * temperature * row.Suggested.Step, steps + 1);
        }

        Assert.InRange(row.StepsToEquilibrium!.Value, steps - 1, steps + 1);
        Assert.False(row.StepsAreExtrapolated);
        Assert.Equal(1, row.EvaluationsPerStep);
        // Newton on a quadratic: one step, and a look that it is there.
        Assert.Equal(2, result.Rows[1].EvaluationsPerStep!.Value, 0.01);
    }

    /// <summary>
    /// A tilted double well at T = 0.15, where mass between the wells settles over hundreds of time units: the extrapolated stationary bias is that of 40,000 steps done one by one, and the trapezoid's
    /// own bias is far smaller at that step. Mutation tried: no extrapolation (stops at a law that still moves, 30 % off).
    /// </summary>
    [Fact]
    public void Search_SlowDoubleWell_ExtrapolatesTheStationaryLaw()
    {
        var problem = new Problem(new PolynomialPotential(0, 0.15, -1, 0, 0.5), 0.15, new Domain(new Interval(-2.6, 2.6)), new GaussianStart(-1, 0.05));
        var grid = new Grid(new Axis(problem.Domain.X, 256));
        var result = StepSuggestion.Search(problem, grid, TimePlan.Even(0.04, 4, 3), 0.03, WorkerTeam.Alone, ["split-gradient"]);
        var row = Assert.Single(result.Rows);
        var fine = new Grid(new Axis(problem.Domain.X, 1024));
        var onGrid = new GridProblem(problem, fine);
        using var run = SplittingScheme.Gradient.Begin(onGrid, onGrid.Equilibrium, WorkerTeam.Alone);
        for (var k = 0; k < 8000; k++)
            run.Advance(row.Suggested!.Step);
        var expected = LineTransport.Distance(run.Snapshot(), onGrid.Equilibrium);
        Assert.Equal(1, row.Suggested!.StationaryBias!.Value / expected, 0.02);
    }

    /// <summary>
    /// The ensemble keeps the promise: ULA at the suggested step, 300,000 walkers of a double well at t = 6, lies within the bias plus noise of equilibrium; at twice the step it does not. Mutation tried: the double step's row
    /// reported for the step itself.
    /// </summary>
    [Fact]
    public void Search_DoubleWell_IsKeptByTheEnsemble()
    {
        const double bias = 0.008, noise = 0.006;
        var problem = new Problem(new PolynomialPotential(0, 0, -0.5, 0, 0.25), 0.5, new Domain(new Interval(-4, 4)), new GaussianStart(0, 1));
        var grid = new Grid(new Axis(problem.Domain.X, 512));
        var result = StepSuggestion.Search(problem, grid, TimePlan.Even(0.05, 6, 3), bias, WorkerTeam.Alone, ["ula"]);
        var row = Assert.Single(result.Rows);
        var equilibrium = new GridProblem(problem, grid).Equilibrium;
        double At(double step)
        {
            var walkers = SamplerCatalogue.Find("ula")!.Begin(problem, 300_000, 5, WorkerTeam.Alone);
            for (var k = 0; k < Math.Ceiling(6 / step); k++)
                walkers.Advance(step);
            return SampleDistance.Between(walkers.X, [], equilibrium, WorkerTeam.Alone)!.Value.Distance;
        }

        Assert.InRange(At(row.Suggested!.Step), row.Suggested.StationaryBias!.Value - noise, bias + noise);
        Assert.True(At(2 * row.Suggested.Step) > bias + noise);
    }

    [Fact]
    public void Search_UnknownMethod_IsRefused()
    {
        var problem = new Problem(new PolynomialPotential(0, 0, 0.5), 1, new Domain(new Interval(-5, 5)), new GaussianStart(0, 1));
        var fault = Assert.Throws<InputException>(() => StepSuggestion.Search(
            problem, new Grid(new Axis(problem.Domain.X, 64)), TimePlan.Even(0.1, 1, 2), 0.1, WorkerTeam.Alone, ["exact"]));
        Assert.Contains("no law", fault.Message, StringComparison.Ordinal);
    }
}
