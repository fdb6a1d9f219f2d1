using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// Stationary variance over T/λ on a quadratic V, by z = Mλτ; the closed forms are derived from the one-step recursion of each scheme.
/// Mutation tried: the noise's deviation computed from τ without the mobility; Advance_StationaryStart_KeepsTheQuadraticLaw, which runs at mobility 2, failed.
/// </summary>
public class StationaryVarianceTests
{
    public static TheoryData<string, double, double> Rows => new()
    {
        // sampler, z, ratio
        { "ula", 0.2, 1 / (1 - 0.1) },
        { "ula", 1.0, 2 },
        { "proximal-ula", 0.2, 1.2 * 1.2 / 1.1 },
        { "proximal-ula", 3.0, 16 / 2.5 },
    };

    [Theory]
    [MemberData(nameof(Rows))]
    public void Advance_StationaryStart_KeepsTheQuadraticLaw(string name, double z, double ratio)
    {
        const int walkers = 200_000;
        const double curvature = 1.5, temperature = 0.3, mobility = 2;
        var stationary = ratio * temperature / curvature;
        var problem = new Problem(
            new PolynomialPotential(0, 0, curvature / 2), temperature, new Domain(new Interval(-12, 12)), new GaussianStart(0, stationary), mobility);
        var run = SamplerCatalogue.Find(name)!.Begin(problem, walkers, 20, WorkerTeam.Alone);
        for (var k = 0; k < 40; k++)
        {
            Assert.Null(run.Advance(z / (mobility * curvature)).Failure);
        }

        // The start is a draw of the stationary law itself: 40 steps keep it when the ratio is right, and forget it at rate 1 − O(z) when not.
        var score = (SampleStatistics.Variance(run.X) / stationary - 1) / Math.Sqrt(2.0 / walkers);
        Assert.InRange(score, -4, 4);
        Assert.InRange(SampleStatistics.Mean(run.X) / Math.Sqrt(stationary / walkers), -4, 4);
    }

    [Theory]
    [MemberData(nameof(Rows))]
    public void Advance_OtherStart_ReachesTheQuadraticLaw(string name, double z, double ratio)
    {
        const int walkers = 200_000;
        var problem = new Problem(new PolynomialPotential(0, 0, 0.5), 1, new Domain(new Interval(-20, 20)), new GaussianStart(0.5, 0.2));
        var run = SamplerCatalogue.Find(name)!.Begin(problem, walkers, 21, WorkerTeam.Alone);
        for (var time = 0.0; time < 8; time += z)
            run.Advance(z);
        Assert.InRange((SampleStatistics.Variance(run.X) / ratio - 1) / Math.Sqrt(2.0 / walkers), -4, 4);
    }
}
