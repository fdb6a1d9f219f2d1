using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Jko;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Published;

/// <summary>
/// JKO steps of normal densities in V = λx²/2. Within normal densities W2² = (m − m′)² + (σ − σ′)², so that a step is a minimum over two numbers; the
/// minimiser over all densities is normal. Derived from the definition; σ = 0.6069507949 for s = 0.6, T = 0.5, λ = 1.3, τ = 0.2 was also found by an independent
/// minimisation over quantiles.
/// </summary>
public class JkoLineValues
{
    private const double ExactDeviation = 0.6667177317823404;

    private static FlowRun Begin(FlowScheme scheme, double stiffness, double temperature, double mean, double deviation, double halfWidth, int cells)
    {
        var problem = new Problem(new PolynomialPotential(0, 0, 0.5 * stiffness), temperature,
            new Domain(new Interval(-halfWidth, halfWidth)), new GaussianStart(mean, deviation * deviation));
        var grid = new Grid(new Axis(problem.Domain.X, cells));
        return scheme.Begin(new GridProblem(problem, grid), StartOnGrid.Create(problem.Start, grid), WorkerTeam.Alone);
    }

    private static (double Mean, double Deviation) MomentsOf(Density density)
    {
        double mean = 0, second = 0;
        for (var i = 0; i < density.Values.Length; i++)
        {
            var x = density.Grid.X.Center(i);
            mean += density.Values[i] * x * density.Grid.X.Width;
            second += density.Values[i] * x * x * density.Grid.X.Width;
        }

        return (mean, Math.Sqrt(second - mean * mean));
    }

    [Fact]
    public void Advance_OneStep_ConvergesToTheClosedForm()
    {
        const double exact = 0.6069507949;
        var observed = ObservedOrder.Measure([1 / 500.0, 1 / 2000.0, 1 / 8000.0], size =>
        {
            var count = (int)Math.Round(1 / size);
            var run = Begin(new JkoScheme(parcels: count), 1.3, 0.5, 0, 0.6, 5, count);
            var report = run.Advance(0.2);
            Assert.Null(report.Failure);
            Assert.Equal(exact - 0.6, report.StepDistance!.Value, 40 * size * size + 1e-9);
            return Math.Abs(MomentsOf(run.Snapshot()).Deviation - exact);
        });
        observed.AssertAtLeast(1.8);
        Assert.True(observed.Errors[^1] < 1e-8, observed.ToString());
    }

    [Theory]
    [InlineData(0.05)]
    [InlineData(1.0)]
    [InlineData(20.0)]
    public void Advance_ManySteps_FollowsTheRecursion(double step)
    {
        const double temperature = 0.5;
        const double stiffness = 1.3;
        var run = Begin(new JkoScheme(), stiffness, temperature, 1.2, 0.35, 6, 3000);
        var (mean, deviation) = (1.2, 0.35);
        for (var k = 0; k < 6; k++)
        {
            run.Advance(step);
            mean /= 1 + stiffness * step;
            deviation = (deviation + Math.Sqrt(deviation * deviation + 4 * temperature * step * (1 + stiffness * step))) / (2 * (1 + stiffness * step));
            var found = MomentsOf(run.Snapshot());
            Assert.Equal(mean, found.Mean, 1e-6);
            Assert.Equal(deviation, found.Deviation, 1e-6);
        }
    }

    /// <summary>
    /// σ at t = 1 for T = 0.5, λ = 1, σ₀ = 0.3 against e^(−2t)-relaxation of the variance. The errors of the three recursions on normal densities: JKO
    /// 5.7e-3 at 20 steps and 3.6e-4 at 320; BDF2 begun with a JKO step 3.6e-5 and 4.3e-7; midpoint 1.1e-4 and 4.3e-7; evaluated outside this program
    /// to the two digits shown, and here from the recursions themselves.
    /// </summary>
    [Theory]
    [InlineData("jko", 20, 5.7e-3)]
    [InlineData("jko", 320, 3.6e-4)]
    [InlineData("jko-bdf2", 20, 3.6e-5)]
    [InlineData("jko-bdf2", 320, 4.3e-7)]
    [InlineData("jko-midpoint", 20, 1.1e-4)]
    [InlineData("jko-midpoint", 320, 4.3e-7)]
    public void Recursion_GaussianFlow_HasTheTabulatedErrors(string name, int steps, double tabulated)
        => Assert.Equal(1, Math.Abs(Recursion(name, steps) - ExactDeviation) / tabulated, 0.05);

    [Theory]
    [InlineData("jko", 20)]
    [InlineData("jko", 160)]
    [InlineData("jko-bdf2", 20)]
    [InlineData("jko-bdf2", 160)]
    [InlineData("jko-midpoint", 20)]
    [InlineData("jko-midpoint", 160)]
    public void Advance_GaussianFlow_HasTheErrorConstantOfTheRecursion(string name, int steps)
    {
        var step = 1.0 / steps;
        // Parcels enough for an error in space of 2 % of the least error in time.
        var run = Begin(SchemeFor(name), 1, 0.5, 0, 0.3, 4.5, 4000);
        for (var k = 0; k < steps; k++)
            Assert.Null(run.Advance(step).Failure);
        Assert.Equal(1, (MomentsOf(run.Snapshot()).Deviation - ExactDeviation) / (Recursion(name, steps) - ExactDeviation), 0.05);
    }

    private static FlowScheme SchemeFor(string name) => name switch
    {
        "jko" => new JkoScheme(parcels: 16000),
        "jko-bdf2" => new JkoBdf2Scheme(16000),
        _ => new JkoMidpointScheme(16000),
    };

    private static double Recursion(string name, int steps)
    {
        const double temperature = 0.5;
        var step = 1.0 / steps;
        var (before, now) = (0.0, 0.3);
        for (var k = 0; k < steps; k++)
        {
            // Each is the positive root of a quadratic a σ² − b σ − c = 0.
            var (a, b, c) = name switch
            {
                "jko-midpoint" => (2 + step, 2 * now, temperature * step),
                "jko-bdf2" when k > 0 => (3 + 2 * step, 4 * now - before, 2 * temperature * step),
                _ => (1 + step, now, temperature * step),
            };
            var root = (b + Math.Sqrt(b * b + 4 * a * c)) / (2 * a);
            (before, now) = (now, name == "jko-midpoint" ? 2 * root - now : root);
        }

        return now;
    }
}
