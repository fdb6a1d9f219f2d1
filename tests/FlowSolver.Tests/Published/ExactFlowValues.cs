using FlowSolver.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Problems.ClosedForms;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Published;

/// <summary>The exact flow against values and inequalities from outside.</summary>
public class ExactFlowValues
{
    private static (GridProblem Problem, Density Result) Run(ClosedForm form, double from, double time, Interval interval, int cells)
    {
        var problem = new GridProblem(form.ProblemFrom(interval, from), new Grid(new Axis(interval, cells)));
        using var run = new ExactFlowScheme().Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
        if (time > 0)
            Assert.Null(run.Advance(time).Failure);
        return (problem, run.Snapshot());
    }

    // The value at h → 0 from two grids of a scheme of second order.
    private static double Extrapolated(Func<int, double> value, int cells) => value(2 * cells) + (value(2 * cells) - value(cells)) / 3;

    /// <summary>
    /// Ornstein-Uhlenbeck process: mean, variance, free energy and relative entropy in closed form (C. Gardiner, Handbook of Stochastic Methods; H. Risken,
    /// The Fokker-Planck Equation, 2nd ed. 1989, chapter 5; from memory).
    /// </summary>
    [Theory]
    [InlineData(1, 0.5, 1, 0.09, 0.7)]
    [InlineData(2.5, 0.3, -0.8, 0.4, 0.3)]
    [InlineData(0.3, 1, 1.5, 0.25, 4)]
    public void OrnsteinUhlenbeck_MomentsAndEnergies_FollowClosedForm(double stiffness, double temperature, double mean, double variance, double time)
    {
        var form = new OrnsteinUhlenbeck(stiffness, temperature, mean, variance);
        var interval = form.Support(time);
        Assert.Equal(form.Mean(time), Extrapolated(n => MomentMeasure.Of(Run(form, 0, time, interval, n).Result).MeanX, 400), 2e-7);
        Assert.Equal(form.Variance(time), Extrapolated(n => MomentMeasure.Of(Run(form, 0, time, interval, n).Result).VarianceX, 400), 2e-7);
        Assert.Equal(form.FreeEnergy(time), Extrapolated(n => Value(n, (p, d) => p.FreeEnergy(d)), 400), 2e-7);
        Assert.Equal(form.RelativeEntropy(time), Extrapolated(n => Value(n, (p, d) => p.RelativeEntropy(d)), 400), 5e-7);
        double Value(int cells, Func<GridProblem, double[], double> measure)
        {
            var (problem, result) = Run(form, 0, time, interval, cells);
            return measure(problem, result.Values);
        }
    }

    /// <summary>
    /// Bistable potential V = ζ cosh 2x − 2 log cosh x at T = 1 with ρ = π(1 + e^(−4ζt) tanh x), partner of M. Razavy, Am. J. Phys. 48 (1980) 285 (from
    /// memory): mean, variance, relative entropy and W2 to equilibrium, evaluated by quadrature outside this program. Here the flow carries the density
    /// there from time 0 on two grids, extrapolated.
    /// </summary>
    [Theory]
    [InlineData(0.25, 0.25, 0.454011245558, 0.6291325970358, 0.1358397180825, 0.5014346751)]
    [InlineData(0.25, 0.5, 0.3535843135638, 0.7102369413305, 0.0798698906480, 0.3907899995)]
    [InlineData(0.25, 1, 0.2144597269699, 0.7892658336369, 0.0286179805180, 0.2373307390)]
    [InlineData(0.25, 2, 0.0788953245115, 0.8290343358991, 0.00382621368358, 0.0873845119)]
    [InlineData(0.1, 0.5, 0.8090261367460, 1.017481951496, 0.2248656366, 0.9608475252)]
    [InlineData(0.1, 1, 0.6623745781978, 1.233265159591, 0.1448234741188, 0.7956517280)]
    [InlineData(0.1, 2, 0.4440029577504, 1.474866614943, 0.0626888651322, 0.5423378253)]
    public void HyperbolicBistable_OverTime_FollowsTable(double zeta, double time, double mean, double variance, double entropy, double distance)
    {
        var form = new HyperbolicBistable(zeta, 1);
        var interval = form.Support(time);
        var coarse = Run(form, 0, time, interval, 500);
        var fine = Run(form, 0, time, interval, 1000);
        Assert.Equal(mean, Extrapolate(r => MomentMeasure.Of(r.Result).MeanX), 1e-7);
        Assert.Equal(variance, Extrapolate(r => MomentMeasure.Of(r.Result).VarianceX), 1e-7);
        Assert.Equal(entropy, Extrapolate(r => r.Problem.RelativeEntropy(r.Result.Values)), 1e-7);
        Assert.Equal(distance, Extrapolate(r => LineTransport.Distance(r.Result, r.Problem.Equilibrium)), 2e-6);
        double Extrapolate(Func<(GridProblem Problem, Density Result), double> measure) => measure(fine) + (measure(fine) - measure(coarse)) / 3;
    }

    /// <summary>Equilibrium second moments of the same potential: 0.8352588081288744 (ζ = ¼) and 1.672005241433874 (ζ = 0.1).</summary>
    [Theory]
    [InlineData(0.25, 0.8352588081288744)]
    [InlineData(0.1, 1.672005241433874)]
    public void HyperbolicBistable_Equilibrium_HasTheSecondMoment(double zeta, double secondMoment)
    {
        var form = new HyperbolicBistable(zeta, 0);
        var (_, result) = Run(form, 0, 3, form.Support(3), 300);
        Assert.Equal(secondMoment, MomentMeasure.Of(result).VarianceX, 1e-12);
    }

    /// <summary>
    /// Propagator of Brownian motion with dry friction, V = a|x| (H. Touchette, E. Van der Straeten, W. Just, J. Phys. A 43 (2010) 445002; T. Caughey,
    /// J. Dienes, J. Appl. Phys. 32 (1961) 2476): from its own density at one time to that at a later one, second order in h across the kink, on grids
    /// whose faces or whose centres meet the kink.
    /// </summary>
    [Theory]
    [InlineData(0)]
    [InlineData(1)]
    public void DryFriction_Propagator_IsFollowedAtSecondOrder(int odd)
    {
        var form = new DryFriction(1.5, 0.6, 1);
        var interval = new Interval(-9, 9);
        var observed = ObservedOrder.Measure([1.0 / (200 + odd), 1.0 / (400 + odd), 1.0 / (800 + odd), 1.0 / (1600 + odd)], size =>
        {
            var (problem, result) = Run(form, 0.4, 0.5, interval, (int)Math.Round(1 / size));
            var exact = new double[problem.Grid.Nx];
            form.Density(0.9, problem.Grid.X.Centers(), exact);
            return 2 * TotalVariation.Between(problem.Grid, result.Values, exact);
        });
        observed.AssertFinest(2, 0.15);
        Assert.True(observed.Errors[^1] < 1e-4, observed.ToString());
    }

    /// <summary>Heat kernel (H. Carslaw, J. Jaeger, Conduction of Heat in Solids, 2nd ed. 1959, from memory): on the line the variance grows by exactly 2Tt on the grid too.</summary>
    [Fact]
    public void FreeDiffusion_OnTheLine_WidensByTwiceTemperatureTimesTime()
    {
        var form = new FreeDiffusion(0.3, 0.2, 0.25);
        var (_, result) = Run(form, 0, 1.5, form.Support(1.5), 300);
        var moments = MomentMeasure.Of(result);
        Assert.Equal(0.2, moments.MeanX, 1e-11);
        Assert.Equal(form.Variance(1.5), moments.VarianceX, 1e-11);
    }

    /// <summary>The same between walls and on a circle, by images.</summary>
    [Theory]
    [InlineData(AxisEnds.Reflecting)]
    [InlineData(AxisEnds.Periodic)]
    public void FreeDiffusion_BetweenEnds_FollowsImages(AxisEnds ends)
    {
        var interval = new Interval(-1, 1, ends);
        var form = new FreeDiffusion(0.3, 0.6, 0.02, interval);
        var observed = ObservedOrder.Measure([1.0 / 50, 1.0 / 100, 1.0 / 200], size =>
        {
            var (problem, result) = Run(form, 0, 0.3, interval, (int)Math.Round(1 / size));
            var exact = new double[problem.Grid.Nx];
            form.Density(0.3, problem.Grid.X.Centers(), exact);
            return TotalVariation.Between(problem.Grid, result.Values, exact);
        });
        observed.AssertFinest(2, 0.05);
        Assert.True(observed.Errors[^1] < 1e-4, observed.ToString());
    }

    /// <summary>
    /// Where V″ ≥ λ: F(t) − F* ≤ e^(−2λMt)(F(0) − F*) and I(t) ≤ e^(−2λMt)I(0) (D. Bakry, M. Émery, Lecture Notes in Math. 1123 (1985) 177), F − F* ≤ T²I/2λ (the
    /// logarithmic Sobolev inequality there), W2² ≤ 2(F − F*)/λ (M. Talagrand, Geom. Funct. Anal. 6 (1996) 587) and (∫|ρ − π|)² ≤ 2 KL (Csiszár, Kullback,
    /// Pinsker). All from memory.
    /// </summary>
    [Theory]
    [InlineData(1, 0, 0.4)]
    [InlineData(0.5, 0.6, 0.7)]
    [InlineData(2, 0.2, 1.5)]
    public void ConvexPotential_Decay_ObeysTheInequalities(double stiffness, double quartic, double temperature)
    {
        var interval = new Interval(-6, 6);
        var problem = new GridProblem(
            new Problem(new PolynomialPotential(0, 0.1, stiffness / 2, 0, quartic / 4), temperature, new Domain(interval), new GaussianStart(1.2, 0.1), 1.4),
            new Grid(new Axis(interval, 800)));
        var generator = new Generator(problem);
        using var run = new ExactFlowScheme().Begin(problem, StartOnGrid.Create(problem.Problem.Start, problem.Grid), WorkerTeam.Alone);
        double Excess() => temperature * problem.RelativeEntropy(run.Snapshot().Values);
        double Dissipation() => temperature * temperature * FisherInformation.Of(generator, run.Snapshot().Values);
        var (excess, dissipation) = (Excess(), Dissipation());
        var distance = LineTransport.Distance(run.Snapshot(), problem.Equilibrium);
        // The grid changes curvature by a share of about (h·V″/V′)²; one part in a thousand allows for it.
        const double slack = 1.001;
        for (var k = 1; k <= 20; k++)
        {
            run.Advance(0.05);
            var decay = Math.Exp(-stiffness * 1.4 * 0.05 * k);
            Assert.True(Excess() <= decay * decay * excess * slack, $"free energy at {run.Time}");
            Assert.True(Dissipation() <= decay * decay * dissipation * slack, $"dissipation at {run.Time}");
            Assert.True(Excess() <= Dissipation() / (2 * stiffness) * slack, $"logarithmic Sobolev at {run.Time}");
            var toEquilibrium = LineTransport.Distance(run.Snapshot(), problem.Equilibrium);
            Assert.True(toEquilibrium <= decay * distance * slack, $"W2 at {run.Time}");
            Assert.True(toEquilibrium * toEquilibrium <= 2 * Excess() / stiffness * slack, $"Talagrand at {run.Time}");
            var variation = 2 * TotalVariation.Between(run.Snapshot(), problem.Equilibrium);
            Assert.True(variation * variation <= 2 * Excess() / temperature, $"Pinsker at {run.Time}");
        }
    }
}
