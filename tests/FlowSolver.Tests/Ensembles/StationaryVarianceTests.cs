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
        { "noise-then-prox", 0.2, 1 / 1.1 },
        { "noise-then-prox", 3.0, 1 / 2.5 },
        { "half-explicit-half-prox", 0.2, 1 },
        { "half-explicit-half-prox", 1.5, 1 },
        { "half-noise-flow-half-noise", 0.2, 0.2 / Math.Tanh(0.2) },
        { "half-noise-flow-half-noise", 1.5, 1.5 / Math.Tanh(1.5) },
        { "leimkuhler-matthews", 0.2, 1 },
        { "leimkuhler-matthews", 1.0, 1 },
        { "mala", 0.2, 1 },
        { "mala", 1.0, 1 },
        { "proximal-mala", 0.2, 1 },
        { "proximal-mala", 1.0, 1 },
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

        // The start is a draw of the stationary law itself (but for the noise that Leimkuhler-Matthews carries over, which 40 steps forget): it is kept when
        // the ratio is right, and left at rate 1 − O(z) when not.
        var score = (SampleStatistics.Variance(run.X) / stationary - 1) / Math.Sqrt(2.0 / walkers);
        Assert.InRange(score, -4, 4);
        Assert.InRange(SampleStatistics.Mean(run.X) / Math.Sqrt(stationary / walkers), -4, 4);
    }

    /// <summary>With a constant error b of the gradient the mean is −b/λ, and the error's variance s² adds τs²/2 to the temperature of the noise.</summary>
    [Fact]
    public void Advance_NoisyGradient_HasItsStationaryLaw()
    {
        const int walkers = 200_000;
        const double curvature = 1.5, temperature = 0.3, mobility = 2, step = 0.1, bias = 0.6, variance = 0.8;
        const double z = mobility * curvature * step;
        const double stationary = (temperature + 0.5 * mobility * step * variance) / curvature / (1 - z / 2);
        var problem = new Problem(
            new PolynomialPotential(0, 0, curvature / 2), temperature, new Domain(new Interval(-12, 12)), new GaussianStart(0, stationary), mobility);
        var run = SamplerCatalogue.Find("ula-noisy-gradient", new SamplerOptions { GradientBiasX = bias, GradientVariance = variance })!
            .Begin(problem, walkers, 22, WorkerTeam.Alone);
        for (var k = 0; k < 60; k++)
            Assert.Null(run.Advance(step).Failure);
        Assert.InRange((SampleStatistics.Variance(run.X) / stationary - 1) / Math.Sqrt(2.0 / walkers), -4, 4);
        Assert.InRange((SampleStatistics.Mean(run.X) + bias / curvature) / Math.Sqrt(stationary / walkers), -4, 4);
    }

    /// <summary>The variance follows v′ = (1 − z)²v + 2z·T/λ with z of the part being taken.</summary>
    [Fact]
    public void Advance_DecreasingSteps_FollowTheRecursion()
    {
        const int walkers = 200_000;
        var sampler = new DecreasingStepLangevin(3, 0.5);
        Assert.Equal([1, 1, 1, 1, 1, 1, 1, 1, 1, 2, 2], Enumerable.Range(0, 11).Select(sampler.PartsOf));
        var problem = new Problem(new PolynomialPotential(0, 0, 0.5), 1, new Domain(new Interval(-20, 20)), new GaussianStart(0, 0.2));
        var run = sampler.Begin(problem, walkers, 23, WorkerTeam.Alone);
        var expected = 0.2;
        for (var k = 0; k < 30; k++)
        {
            run.Advance(0.5);
            var parts = sampler.PartsOf(k);
            for (var part = 0; part < parts; part++)
                expected = (1 - 0.5 / parts) * (1 - 0.5 / parts) * expected + 2 * 0.5 / parts;
            Assert.InRange((SampleStatistics.Variance(run.X) / expected - 1) / Math.Sqrt(2.0 / walkers), -4.5, 4.5);
        }
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
