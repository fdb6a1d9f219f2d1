using FlowSolver.Diagnostics;
using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Published;

/// <summary>Values from outside that ensembles of walkers must reproduce to sampling noise.</summary>
public class SamplerValues
{
    /// <summary>
    /// True W2 bias of three chains on U = x²/2 + ln cosh x, T = 1. The values were computed before this program, with other code (quadrature of each chain's
    /// transition law, to five digits).
    /// Mutation tried: the proximal part of noise-then-prox given half its time; both its rows failed.
    /// </summary>
    [Theory]
    [InlineData("ula", 0.4, 0.18939)]
    [InlineData("ula", 0.1, 0.03841)]
    [InlineData("proximal-ula", 0.4, 0.33863)]
    [InlineData("proximal-ula", 0.1, 0.09166)]
    [InlineData("noise-then-prox", 0.4, 0.11674)]
    [InlineData("noise-then-prox", 0.1, 0.03409)]
    public void StationaryBias_OfThreeChains_IsTheComputedOne(string name, double step, double bias)
    {
        const int walkers = 200_000;
        var interval = new Interval(-8, 8);
        var potential = FormulaPotential.Parse("x^2/2 + log(cosh(x))", 1);
        var equilibrium = new FunctionStart(
            (x, y, value) =>
            {
                potential.Value(x, y, value);
                for (var i = 0; i < value.Length; i++)
                    value[i] = Math.Exp(-value[i]);
            }, "equilibrium");
        var problem = new Problem(potential, 1, new Domain(interval), equilibrium);
        var run = SamplerCatalogue.Find(name)!.Begin(problem, walkers, 51, WorkerTeam.Alone);
        // Curvature at least 1: the bias is within e^(−8) of its last value.
        for (var time = 0.0; time < 8; time += step)
            Assert.Null(run.Advance(step).Failure);
        var density = new GridProblem(problem, new Grid(new Axis(interval, 2048))).Equilibrium;
        var distance = SampleDistance.Between(run.X, [], density, WorkerTeam.Alone)!.Value.Distance;
        var floor = NoiseFloor.Simulate(density, walkers, 40, 6, WorkerTeam.Alone)!;
        // The noise adds in squares on average; its own spread enters as 2·bias·(standard error of the shift), 1/√N and a half for the width.
        var measured = Math.Sqrt(Math.Max(0, distance * distance - floor.MeanSquare));
        Assert.InRange(measured - bias, -4.5 * 1.5 / Math.Sqrt(walkers), 4.5 * 1.5 / Math.Sqrt(walkers));
    }

    /// <summary>
    /// A bead of 0.5 µm radius in water at 25 °C, trap 10 pN/µm: K. Berg-Sørensen, H. Flyvbjerg, Rev. Sci. Instrum. 75 (2004) 594-612 (formulas from memory):
    /// corner frequency κ/(2πγ) = 189.740 Hz, root mean square √(k_BT/κ) = 20.289 nm, and for samples Δt apart, N of them, the expected power
    /// P_k = Δx²Δt/(1 + c² − 2c·cos(2πk/N)), c = e^(−2πf_cΔt), Δx² = (1 − c²)k_BT/κ. In pN, µm, s: k_BT = 4.116405e-3 pN µm, γ = 8.38805e-3 pN s/µm.
    /// Mutation tried: the mobility left out of the walkers' noise; the test failed.
    /// </summary>
    [Fact]
    public void BeadInATrap_HasItsSpectrumAndCornerFrequency()
    {
        const double stiffness = 10, thermal = 4.1164050e-3, friction = 8.38805e-3;
        const double corner = 189.740;
        Assert.Equal(corner, stiffness / (2 * Math.PI * friction), 3);
        const int walkers = 2048, samples = 256, substeps = 4;
        const double interval = 1.0 / 2000;
        var problem = new Problem(
            FormulaPotential.Parse("5*x^2", 1), thermal, new Domain(new Interval(-0.3, 0.3)), new GaussianStart(0, thermal / stiffness), 1 / friction);
        var run = SamplerCatalogue.Find("half-explicit-half-prox")!.Begin(problem, walkers, 52, WorkerTeam.Alone);
        var track = new double[samples][];
        for (var k = 0; k < samples; k++)
        {
            track[k] = run.X.ToArray();
            for (var s = 0; s < substeps; s++)
                run.Advance(interval / substeps);
        }

        // Root mean square over independent walkers: standard error of the variance √(2/N).
        Assert.InRange((SampleStatistics.Variance(run.X) / (0.020289 * 0.020289) - 1) / Math.Sqrt(2.0 / walkers), -4, 4);

        // Correlation of neighbouring samples gives the corner frequency: r = Σ x_k x_{k+1} / Σ x_k², error √((1 − c²)/(walkers·samples)).
        double product = 0, square = 0;
        for (var k = 0; k + 1 < samples; k++)
        {
            for (var i = 0; i < walkers; i++)
            {
                product += track[k][i] * track[k + 1][i];
                square += track[k][i] * track[k][i];
            }
        }

        var correlation = Math.Exp(-2 * Math.PI * corner * interval);
        var error = Math.Sqrt((1 - correlation * correlation) / (walkers * (samples - 1.0)));
        // The step's own error in the decay is of third order: z³/12 = 1e-4 of the exponent over all substeps.
        Assert.InRange(product / square - correlation, -4 * error - 3e-4, 4 * error + 3e-4);

        // Power at a few frequencies, in the middle of a periodogram: independent exponential numbers, relative error 1/√walkers, and the leakage of a
        // finite record, whose size is the jump at its ends: below 2 % here.
        var jump = (1 - correlation * correlation) * thermal / stiffness;
        foreach (var k in new[] { 8, 24, 64, 120 })
        {
            var power = 0.0;
            for (var i = 0; i < walkers; i++)
            {
                double real = 0, imaginary = 0;
                for (var n = 0; n < samples; n++)
                {
                    var angle = 2 * Math.PI * k * n / samples;
                    real += track[n][i] * Math.Cos(angle);
                    imaginary -= track[n][i] * Math.Sin(angle);
                }

                power += (real * real + imaginary * imaginary) * interval / samples / walkers;
            }

            var expected = jump * interval / (1 + correlation * correlation - 2 * correlation * Math.Cos(2 * Math.PI * k / samples));
            Assert.InRange(power / expected, 1 - 4 / Math.Sqrt(walkers) - 0.02, 1 + 4 / Math.Sqrt(walkers) + 0.02);
        }
    }
}
