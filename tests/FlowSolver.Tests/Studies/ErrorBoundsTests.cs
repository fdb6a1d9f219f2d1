using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Schemes.Splitting;
using FlowSolver.Studies;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Studies;

public class ErrorBoundsTests
{
    private static double Limit(Func<double, double> step)
    {
        var value = 0.0;
        for (var k = 0; k < 20_000; k++)
            value = step(value);
        return value;
    }

    /// <summary>
    /// Limits of the bounds for many steps, on a Gaussian of curvatures 1 and 4 and on U = x²/2 + log cosh x (m = 1, L = 2, M₂ = 4/(3√3)): values computed beforehand, independently of this code.
    /// Mutation tried: 2γ²Ld without the 2.
    /// </summary>
    [Theory]
    [InlineData(1, 4, 2, 0, 0.05, 2.087, 1.2445, 0.8944)]
    [InlineData(1, 2, 1, 0.769800358919501, 0.4, 2.0870, 2.6430, 1.2649)]
    [InlineData(1, 2, 1, 0.769800358919501, 0.1, 1.0435, 0.6607, 0.6325)]
    [InlineData(1, 2, 1, 0.769800358919501, 0.02, 0.4667, 0.1321, 0.2828)]
    public void Steps_Repeated_ReachThePublishedLimits(double m, double l, int d, double lipschitz, double gamma, double first, double second, double convex)
    {
        var u = new ConvexityConstants(m, l, d, lipschitz);
        Assert.Equal(first, Limit(w => BoundSteps.UlaFirstOrder(u, gamma, w)), 1e-4 * first + 5e-5);
        Assert.Equal(second, Limit(w => BoundSteps.UlaSecondOrder(u, gamma, w)), 5e-5);
        Assert.Equal(convex, Limit(w => BoundSteps.ProximalConvexOptimisation(u, gamma, w)), 5e-5);
        if (gamma <= 1 / l)
            Assert.Equal(convex, Limit(w => BoundSteps.UlaConvexOptimisation(u, gamma, w)), 5e-5);
        if (d == 2)
        {
            var pair = (2.0, 0.0);
            for (var k = 0; k < 2000; k++)
                pair = BoundSteps.UlaMoments(u, gamma, pair);
            Assert.Equal(1.9465, Math.Sqrt(pair.Item2), 5e-5);
        }
    }

    /// <summary>
    /// 600 random Gaussian targets (up to three curvatures, condition up to 30), random Gaussian starts, random steps over and beyond the allowed range: each chain's law and its W2 in closed form, and no bound is below at any of 40 steps. The bounds to the exact flow included.
    /// Mutations tried: the rise 2Mτ[E(ρₖ) − E(Pρₖ₋₁)] left out; contraction (1 + 3mγ) for the implicit chain; the slope bound with another factor τ.
    /// </summary>
    [Fact]
    public void Steps_RandomGaussians_AreNeverBelowTheError()
    {
        var random = new Random(11);
        var drawn = new int[10];
        for (var trial = 0; trial < 600; trial++)
        {
            var d = 1 + trial % 3;
            var (temperature, mobility) = (Math.Exp(random.NextDouble() * 2 - 1), Math.Exp(random.NextDouble() - 0.5));
            var stiffness = new double[d];
            var (mean, deviation) = (new double[d], new double[d]);
            for (var i = 0; i < d; i++)
            {
                stiffness[i] = Math.Exp(random.NextDouble() * 3.4 - 1.2);
                mean[i] = trial % 4 == 0 ? 0 : 3 * random.NextDouble() - 1.5;
                deviation[i] = trial % 5 == 0 ? 1e-3 : Math.Exp(3 * random.NextDouble() - 2);
            }

            var u = new ConvexityConstants(stiffness.Min() / temperature, stiffness.Max() / temperature, d, 0);
            var step = 2.2 / (mobility * stiffness.Max()) * Math.Exp(-5 * random.NextDouble());
            var gamma = mobility * temperature * step;
            var t = mobility * step;
            // Laws as (means, deviations) along the common axes.
            var ula = ((double[])mean.Clone(), (double[])deviation.Clone());
            var prox = ((double[])mean.Clone(), (double[])deviation.Clone());
            var chain = ((double[])mean.Clone(), (double[])deviation.Clone());
            var jko = ((double[])mean.Clone(), (double[])deviation.Clone());
            var exact = ((double[])mean.Clone(), (double[])deviation.Clone());
            var posterior = new PosteriorBound(mobility, FreeEnergy(prox));
            var start = ToEquilibrium(ula);
            double[] bounds = [start, start, start, start, start, start, start, start, start];
            var moments = (Memory: 2.0, Bias: 0.0);
            var spread = mean.Zip(deviation, (a, b) => a * a + b * b).Sum() + d / u.Convexity;
            var slope = Math.Sqrt(Enumerable.Range(0, d).Sum(i => stiffness[i] * stiffness[i] * mean[i] * mean[i] + Math.Pow(stiffness[i] * deviation[i] - temperature / deviation[i], 2)));
            var (energySquare, slopeSquare) = (double.NaN, BoundSteps.JkoFiniteSlopeSquare(mobility, step, slope));
            for (var k = 1; k <= 40; k++)
            {
                for (var i = 0; i < d; i++)
                {
                    var (lambda, noise) = (stiffness[i], 2 * temperature * t);
                    Move(ula, i, 1 - lambda * t, noise);
                    var decay = Math.Exp(-lambda * t);
                    Move(exact, i, decay, temperature / lambda * (1 - decay * decay));
                    chain.Item2[i] = Math.Sqrt(chain.Item2[i] * chain.Item2[i] + noise) / (1 + lambda * t);
                    chain.Item1[i] /= 1 + lambda * t;
                    jko.Item1[i] /= 1 + lambda * t;
                    jko.Item2[i] = (jko.Item2[i] + Math.Sqrt(jko.Item2[i] * jko.Item2[i] + 4 * temperature * t * (1 + lambda * t))) / (2 * (1 + lambda * t));
                }

                var mapped = ((double[])prox.Item1.Clone(), (double[])prox.Item2.Clone());
                for (var i = 0; i < d; i++)
                {
                    Move(mapped, i, 1 / (1 + stiffness[i] * t), 0);
                    Move(prox, i, 1 / (1 + stiffness[i] * t), 2 * temperature * t);
                }

                posterior.Add(step, FreeEnergy(prox), Energy(mapped), Energy(prox));
                if (k == 1)
                    energySquare = BoundSteps.JkoFiniteEnergySquare(mobility, step, FreeEnergy((mean, deviation)), FreeEnergy(jko), Between(jko, (mean, deviation)));
                Func<ConvexityConstants, double, double, double>[] steps =
                [
                    BoundSteps.UlaFirstOrder, BoundSteps.UlaSecondOrder, BoundSteps.UlaOptimisation, BoundSteps.UlaConvexOptimisation, BoundSteps.ProximalConvexOptimisation,
                    BoundSteps.ProximalCoupling, BoundSteps.ImplicitConvexOptimisation, BoundSteps.Jko, BoundSteps.ExactFlow,
                ];
                double[] errors =
                [
                    ToEquilibrium(ula), ToEquilibrium(ula), ToEquilibrium(ula), ToEquilibrium(ula), ToEquilibrium(prox), ToEquilibrium(prox), ToEquilibrium(chain), ToEquilibrium(jko), ToEquilibrium(exact),
                ];
                for (var b = 0; b < steps.Length; b++)
                {
                    bounds[b] = steps[b](u, gamma, bounds[b]);
                    Hold(bounds[b], errors[b], $"bound {b}");
                    drawn[b] += double.IsNaN(bounds[b]) ? 0 : 1;
                }

                moments = BoundSteps.UlaMoments(u, gamma, moments);
                Hold(Math.Sqrt(moments.Memory * spread + moments.Bias), ToEquilibrium(ula), "moments");
                drawn[9] += double.IsNaN(moments.Bias) ? 0 : 1;
                Hold(posterior.Distance, Between(prox, exact), "posterior");
                Hold(Math.Sqrt(energySquare), Between(jko, exact), "finite energy");
                Hold(Math.Sqrt(slopeSquare), Between(jko, exact), "finite slope");

                void Hold(double bound, double error, string name)
                    => Assert.False(bound < error * (1 - 1e-12) - 1e-13, $"trial {trial}, step {k}, {name}: {bound:r} < {error:r} (γ = {gamma:g4}, m = {u.Convexity:g4}, L = {u.Smoothness:g4})");
            }

            double ToEquilibrium((double[] Mean, double[] Deviation) law)
                => Math.Sqrt(Enumerable.Range(0, d).Sum(i => law.Mean[i] * law.Mean[i] + Math.Pow(law.Deviation[i] - Math.Sqrt(temperature / stiffness[i]), 2)));

            double Energy((double[] Mean, double[] Deviation) law)
                => Enumerable.Range(0, d).Sum(i => 0.5 * stiffness[i] * (law.Mean[i] * law.Mean[i] + law.Deviation[i] * law.Deviation[i]));

            double FreeEnergy((double[] Mean, double[] Deviation) law)
                => Energy(law) - temperature * Enumerable.Range(0, d).Sum(i => 0.5 * Math.Log(2 * Math.PI * Math.E) + Math.Log(law.Deviation[i]));
        }

        // Every bound was put to the test often.
        Assert.All(drawn, count => Assert.True(count > 40 * 300, $"only {count} checks"));

        static double Between((double[] Mean, double[] Deviation) a, (double[] Mean, double[] Deviation) b)
            => Math.Sqrt(Enumerable.Range(0, a.Mean.Length).Sum(i => Math.Pow(a.Mean[i] - b.Mean[i], 2) + Math.Pow(a.Deviation[i] - b.Deviation[i], 2)));

        static void Move((double[] Mean, double[] Deviation) law, int i, double factor, double noise)
        {
            law.Mean[i] *= factor;
            law.Deviation[i] = Math.Sqrt(factor * factor * law.Deviation[i] * law.Deviation[i] + noise);
        }
    }

    private static GridProblem OnGrid(Problem problem, int cells)
        => new(problem, new Grid(new Axis(problem.Domain.X, cells), problem.Domain.Y is null ? null : new Axis(problem.Domain.Y, cells)));

    public static TheoryData<string> ConvexCases => ["quartic", "wide", "plane"];

    private static (GridProblem Problem, TimePlan Plan) Case(string name) => name switch
    {
        "quartic" => (OnGrid(new Problem(new PolynomialPotential(0, 0.3, 0.5, 0, 0.05), 0.5, new Domain(new Interval(-5, 5)), new GaussianStart(1, 0.09)), 400), TimePlan.Even(0.05, 1, 3)),
        "wide" => (OnGrid(new Problem(new PolynomialPotential(0, 0, 0.6, 0.02, 0.02), 0.8, new Domain(new Interval(-7, 7)), new GaussianStart(-1, 1.2), 0.5), 350), TimePlan.Even(0.2, 2, 2)),
        _ => (OnGrid(new Problem(new PlanePotential(1.5, 0.4, 1, 0.05), 0.5, new Domain(new Interval(-5, 5), new Interval(-5, 5)), new GaussianStart(0.7, 0.2, -0.5, 0.4)), 64), TimePlan.Even(0.1, 0.4, 2)),
    };

    /// <summary>On grids, convex but not quadratic: every bound that is drawn stays above the measured W2 at every step and, for the a-posteriori bound, between steps too. Mutation tried: W2² of the exact flow's contraction with e^(−3mt).</summary>
    [Theory]
    [MemberData(nameof(ConvexCases))]
    public void Of_ConvexLandscapes_IsAboveTheMeasuredError(string name)
    {
        var (problem, plan) = Case(name);
        var start = StartOnGrid.Create(problem.Problem.Start, problem.Grid);
        var curves = ErrorBounds.Of(problem, start, plan, WorkerTeam.Alone);
        Assert.True(curves.Count(curve => curve.NotDrawnBecause is null) >= 9, string.Join('\n', curves.Select(curve => $"{curve.Name}: {curve.NotDrawnBecause}")));
        foreach (var group in curves.Where(curve => curve.NotDrawnBecause is null).GroupBy(curve => curve.Method))
        {
            var scheme = SchemeCatalogue.Find(group.Key) ?? SplittingScheme.NoiseThenProximal;
            if (!scheme.Traits.Dimensions.Contains(problem.Grid.Dimension))
                continue;
            using var run = scheme.Begin(problem, start, WorkerTeam.Alone);
            using var exact = new ExactFlowScheme().Begin(problem, start, WorkerTeam.Alone);
            var times = group.First().Times;
            var before = start;
            for (var k = 1; k < times.Count; k++)
            {
                var step = times[k] - times[k - 1];
                run.Advance(step);
                var now = run.Snapshot();
                if (group.Key == "split-proximal")
                {
                    exact.Advance(0.4 * step);
                    var mixed = new Density(problem.Grid, [.. now.Values.Zip(before.Values, (a, b) => 0.4 * a + 0.6 * b)]);
                    var between = DensityDistance.Between(mixed, exact.Snapshot(), WorkerTeam.Alone)!.Value.Low;
                    var bound = group.Single(curve => curve.Name == "split-posterior").At(times[k - 1] + 0.4 * step);
                    Assert.True(bound >= between, $"posterior between steps {k}: {bound} < {between}");
                    exact.Advance(0.6 * step);
                }
                else
                {
                    exact.Advance(step);
                }

                var flow = exact.Snapshot();
                foreach (var curve in group)
                {
                    var error = DensityDistance.Between(now, curve.Target == BoundTarget.ExactFlow ? flow : problem.Equilibrium, WorkerTeam.Alone)!.Value.Low;
                    Assert.True(curve.AtStep(k) >= error - 1e-4 * problem.Grid.X.Width, $"{curve.Name}, step {k}: {curve.AtStep(k):r} < {error:r}");
                }

                before = now;
            }
        }
    }

    /// <summary>Between steps: squares go over linearly, and the bend comes on top as s(1 − s). Mutation tried: the bend left out.</summary>
    [Fact]
    public void At_BetweenSteps_IsLinearInSquaresPlusTheBend()
    {
        var curve = new BoundCurve("a", "b", BoundTarget.ExactFlow, "", "", "", null, [0, 0.5, 1.0], [0, 1, 4], [0, 0.4, 0.8]);
        Assert.Equal(Math.Sqrt(0.25 * 1 + 0.1875 * 0.4), curve.At(0.125), 1e-15);
        Assert.Equal(Math.Sqrt(0.5 * 1 + 0.5 * 4 + 0.25 * 0.8), curve.At(0.75), 1e-15);
        Assert.Equal(2, curve.At(1), 1e-15);
        Assert.Contains("time was 1.5", Assert.Throws<ArgumentOutOfRangeException>(() => curve.At(1.5)).Message, StringComparison.Ordinal);
    }

    /// <summary>A bound whose assumption fails has no values and says why. Mutation tried: convexity not asked for.</summary>
    [Fact]
    public void Of_AssumptionsThatFail_AreNamedAndNothingIsDrawn()
    {
        var doubleWell = OnGrid(new Problem(new PolynomialPotential(0, 0, -0.5, 0, 0.25), 0.2, new Domain(new Interval(-3, 3)), new GaussianStart(-1, 0.09)), 128);
        var curves = ErrorBounds.Of(doubleWell, StartOnGrid.Create(doubleWell.Problem.Start, doubleWell.Grid), TimePlan.Even(0.05, 0.2, 2), WorkerTeam.Alone);
        Assert.All(curves, curve => Assert.Contains("convex", curve.NotDrawnBecause, StringComparison.Ordinal));
        Assert.All(curves, curve => Assert.Empty(curve.Squares));

        var atWall = OnGrid(new Problem(new PolynomialPotential(0, 0, 0.5), 1, new Domain(new Interval(-1, 1)), new GaussianStart(0, 0.04)), 128);
        curves = ErrorBounds.Of(atWall, StartOnGrid.Create(atWall.Problem.Start, atWall.Grid), TimePlan.Even(0.05, 0.2, 2), WorkerTeam.Alone);
        Assert.All(curves, curve => Assert.Contains("walls hold", curve.NotDrawnBecause, StringComparison.Ordinal));

        var longStep = OnGrid(new Problem(new PolynomialPotential(0, 0, 0.5), 0.2, new Domain(new Interval(-5, 5)), new GaussianStart(0, 0.04)), 128);
        curves = ErrorBounds.Of(longStep, StartOnGrid.Create(longStep.Problem.Start, longStep.Grid), TimePlan.Even(1.5, 3, 2), WorkerTeam.Alone);
        Assert.Contains("too long", curves.Single(curve => curve.Name == "ula-convex-optimisation").NotDrawnBecause, StringComparison.Ordinal);
        Assert.Null(curves.Single(curve => curve.Name == "proximal-convex-optimisation").NotDrawnBecause);
    }
}
