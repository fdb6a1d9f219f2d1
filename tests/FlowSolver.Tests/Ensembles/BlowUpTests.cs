using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// Mutations tried: the comparison of energies left out; Advance_StepJustAboveTheLimit_IsNamedBeforeItIsInfinite failed. The limit on a move left out;
/// Advance_SuperlinearGradient_IsNamedAndKeepsTheWalkers failed.
/// </summary>
public class BlowUpTests
{
    private static (int Step, string? Failure, EnsembleRun Run) RunUntilFailure(Problem problem, double step, int walkers = 20_000, int most = 200)
    {
        var run = SamplerCatalogue.Find("ula")!.Begin(problem, walkers, 3, WorkerTeam.Alone);
        for (var k = 1; k <= most; k++)
        {
            var report = run.Advance(step);
            foreach (var x in run.X)
                Assert.True(double.IsFinite(x) && problem.Domain.X.Contains(x));
            if (report.Failure is not null)
                return (k, report.Failure, run);
        }

        return (most, null, run);
    }

    private static Problem Quadratic(Interval interval) => new(new PolynomialPotential(0, 0, 0.5), 0.1, new Domain(interval), new GaussianStart(0.2, 0.1));

    [Theory]
    [InlineData(-6.0, 6.0)]
    [InlineData(-2.0, 15.0)]
    public void Advance_StepJustAboveTheLimit_IsNamedBeforeItIsInfinite(double from, double to)
    {
        // τL = 2.1: walkers would grow by 10 % a step; walls keep them in, on the left at once.
        var (step, failure, _) = RunUntilFailure(Quadratic(new Interval(from, to)), 2.1);
        Assert.NotNull(failure);
        Assert.Contains("must stay below 2", failure);
        Assert.Contains($"at step {step}", failure);
        Assert.InRange(step, 3, 20);
    }

    [Theory]
    [InlineData(1.9)]
    [InlineData(1.0)]
    public void Advance_StepBelowTheLimit_Passes(double step)
        => Assert.Null(RunUntilFailure(Quadratic(new Interval(-12, 12)), step).Failure);

    [Fact]
    public void Advance_SuperlinearGradient_IsNamedAndKeepsTheWalkers()
    {
        var problem = new Problem(new PolynomialPotential(0, 0, 0, 0, 1), 1, new Domain(new Interval(-10, 10)), new GaussianStart(0, 9));
        var (step, failure, run) = RunUntilFailure(problem, 0.1);
        Assert.Equal(1, step);
        Assert.Contains("of 20000 walkers", failure);
        Assert.Contains("x = ", failure);
        Assert.Equal(20_000, run.X.Length);
    }

    [Fact]
    public void Advance_LongStep_IsWarnedOfOnce()
    {
        // Steep only at the walls, where nobody comes: a warning and no failure.
        var problem = new Problem(new PolynomialPotential(0, 0, 0.5, 0, 0, 0, 0.1), 0.01, new Domain(new Interval(-3, 3)), new GaussianStart(0, 0.01));
        var run = SamplerCatalogue.Find("ula")!.Begin(problem, 1000, 3, WorkerTeam.Alone);
        Assert.Contains("above 2 the explicit step overshoots", run.Advance(0.1).Warning);
        Assert.Null(run.Advance(0.1).Warning);
        Assert.Contains("above 2", run.Advance(0.11).Warning);
    }

    [Fact]
    public void Advance_KinkedPotential_IsNoBlowUp()
    {
        // The explicit step jumps over the kink of |x| for ever: noise of its own, but nothing grows.
        var problem = new Problem(new AbsolutePotential(5), 0.2, new Domain(new Interval(-3, 3)), new GaussianStart(0, 0.0001));
        Assert.Null(RunUntilFailure(problem, 0.1).Failure);
    }

    [Fact]
    public void Advance_NotANumber_IsNamed()
    {
        var problem = new Problem(new PolynomialPotential(0, double.NaN), 1, new Domain(new Interval(-1, 1)), new GaussianStart(0, 0.1));
        foreach (var name in new[] { "ula", "proximal-ula" })
        {
            var run = SamplerCatalogue.Find(name)!.Begin(problem, 100, 1, WorkerTeam.Alone);
            Assert.NotNull(run.Advance(0.1).Failure);
            foreach (var x in run.X)
                Assert.True(double.IsFinite(x));
        }
    }

    [Fact]
    public void Advance_ProximalStepTooLongToBeUnique_IsWarnedOf()
    {
        var problem = new Problem(new PolynomialPotential(0, 0, -0.5, 0, 0.25), 0.5, new Domain(new Interval(-3, 3)), new GaussianStart(0, 0.1));
        var run = SamplerCatalogue.Find("proximal-ula")!.Begin(problem, 1000, 3, WorkerTeam.Alone);
        Assert.Null(run.Advance(0.5).Warning);
        var report = run.Advance(1.5);
        Assert.Contains("unique minimiser", report.Warning);
        Assert.Null(report.Failure);
    }
}
