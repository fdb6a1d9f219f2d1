using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// The stationary law of Metropolis-adjusted samplers is π itself, at steps where their proposals alone are far off.
/// Mutations tried: the return density left out of the acceptance (Return not called); Advance_FromEquilibrium_StaysThere failed. The accepted value of V not kept;
/// the same failed.
/// </summary>
public class MetropolisTests
{
    private static FunctionStart Equilibrium(Potential potential, double temperature) => new(
        (x, y, value) =>
        {
            potential.Value(x, y, value);
            for (var i = 0; i < value.Length; i++)
                value[i] = Math.Exp(-value[i] / temperature);
        }, "equilibrium");

    [Theory]
    [InlineData("mala", AxisEnds.Reflecting)]
    [InlineData("mala", AxisEnds.Periodic)]
    [InlineData("proximal-mala", AxisEnds.Reflecting)]
    [InlineData("proximal-mala", AxisEnds.Periodic)]
    public void Advance_FromEquilibrium_StaysThere(string name, AxisEnds ends)
    {
        // Walls at 1.6 cut the wells; on the circle the formula's ends meet in a peak.
        var potential = new PolynomialPotential(0, 0.2, -0.5, 0, 0.25);
        const double temperature = 0.4;
        var problem = new Problem(potential, temperature, new Domain(new Interval(-1.6, 1.6, ends)), Equilibrium(potential, temperature), 1.5);
        var run = SamplerCatalogue.Find(name)!.Begin(problem, 200_000, 31, WorkerTeam.Alone);
        var rate = 0.0;
        for (var k = 0; k < 20; k++)
        {
            var report = run.Advance(0.3);
            Assert.Null(report.Failure);
            rate = report.AcceptanceRate!.Value;
        }

        Assert.InRange(rate, 0.4, 0.95);
        var cumulative = SampleStatistics.Cumulative(x => Math.Exp(-potential.ValueAt(x) / temperature), -1.6, 1.6);
        Assert.InRange(SampleStatistics.Kolmogorov(run.X, cumulative), 0.3, 1.95);
    }

    [Fact]
    public void Advance_InThePlane_StaysAtEquilibrium()
    {
        var potential = new PlanePotential(-0.5, 0.3, 1, 0.5);
        const double temperature = 0.5;
        var axis = new Interval(-3, 3);
        foreach (var name in new[] { "mala", "proximal-mala" })
        {
            var run = SamplerCatalogue.Find(name)!.Begin(new Problem(potential, temperature, new Domain(axis, axis), Equilibrium(potential, temperature)), 100_000, 32, WorkerTeam.Alone);
            for (var k = 0; k < 10; k++)
                Assert.InRange(run.Advance(0.4).AcceptanceRate!.Value, 0.4, 0.95);
            // x + y against its law, by quadrature along lines.
            double Along(double sum)
            {
                var total = 0.0;
                for (var i = 0; i < 400; i++)
                {
                    var x = -3 + 6 * (i + 0.5) / 400;
                    total += Math.Abs(sum - x) > 3 ? 0 : Math.Exp(-potential.ValueAt(x, sum - x) / temperature);
                }

                return total;
            }

            var sums = new double[run.X.Length];
            for (var i = 0; i < sums.Length; i++)
                sums[i] = run.X[i] + run.Y[i];
            var table = new double[601];
            for (var i = 0; i <= 600; i++)
                table[i] = Along(-6 + 12 * i / 600.0);
            var cumulative = SampleStatistics.Cumulative(s => table[Math.Clamp((int)Math.Round((s + 6) * 50), 0, 600)], -6, 6);
            Assert.InRange(SampleStatistics.Kolmogorov(sums, cumulative), 0.3, 1.95);
        }
    }

    [Fact]
    public void Advance_KinkedPotential_StaysAtEquilibrium()
    {
        var potential = new AbsolutePotential(1);
        var run = SamplerCatalogue.Find("proximal-mala")!.Begin(
            new Problem(potential, 0.5, new Domain(new Interval(-6, 6)), Equilibrium(potential, 0.5)), 200_000, 33, WorkerTeam.Alone);
        for (var k = 0; k < 20; k++)
            run.Advance(0.5);
        var cumulative = SampleStatistics.Cumulative(x => Math.Exp(-2 * Math.Abs(x)), -6, 6);
        Assert.InRange(SampleStatistics.Kolmogorov(run.X, cumulative), 0.3, 1.95);
    }

    [Fact]
    public void Advance_ShorterSteps_AcceptMore()
    {
        var problem = new Problem(new PolynomialPotential(0, 0, -0.5, 0, 0.25), 0.5, new Domain(new Interval(-4, 4)), new GaussianStart(0, 0.5));
        double Rate(double step) => SamplerCatalogue.Find("mala")!.Begin(problem, 200_000, 1, WorkerTeam.Alone).Advance(step).AcceptanceRate!.Value;
        Assert.True(Rate(0.5) < Rate(0.1) && Rate(0.1) < Rate(0.01));
        // 1 − rate falls like τ^(3/2).
        Assert.InRange((1 - Rate(0.04)) / (1 - Rate(0.01)), 6, 10);
    }
}
