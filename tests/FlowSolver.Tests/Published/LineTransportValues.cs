using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Published;

public class LineTransportValues
{
    /// <summary>
    /// W2² = (m₁ − m₂)² + (σ₁ − σ₂)² (D. C. Dowson, B. V. Landau, The Fréchet distance between multivariate normal distributions, J. Multivariate
    /// Anal. 12 (1982) 450-455; from memory). Different grids for the two, so that nothing cancels; second order in the cell width.
    /// </summary>
    [Fact]
    public void Distance_TwoGaussians_ConvergesToClosedForm()
    {
        var exact = Math.Sqrt(0.7 * 0.7 + 0.3 * 0.3);
        var observed = ObservedOrder.Measure([0.1, 0.05, 0.025, 0.0125], width =>
        {
            var first = Gaussian(-0.3, 0.5, (int)Math.Round(16 / width));
            var second = Gaussian(0.4, 0.8, (int)Math.Round(12 / width));
            return Math.Abs(LineTransport.Distance(first, second) - exact);
        });
        observed.AssertFinest(2, 0.1);
        Assert.True(observed.Errors[^1] < 1e-5, observed.ToString());
    }

    /// <summary>
    /// Densities π(x)(1 + e^(−4ζt) tanh x), π ∝ cosh²x e^(−ζ cosh 2x): solutions of the drift-diffusion equation with T = 1 in the bistable potential
    /// V = ζ cosh 2x − 2 ln cosh x, the supersymmetric partner of M. Razavy, An exactly soluble Schrödinger equation with a bistable potential,
    /// Am. J. Phys. 48 (1980) 285 (from memory). W2 to π: derived and evaluated to ten digits outside this program, by quadrature.
    /// </summary>
    [Theory]
    [InlineData(0.25, 0, 0.6441866404)]
    [InlineData(0.25, 0.25, 0.5014346751)]
    [InlineData(0.25, 0.5, 0.3907899995)]
    [InlineData(0.25, 1, 0.2373307390)]
    [InlineData(0.25, 2, 0.0873845119)]
    [InlineData(0.1, 0, 1.1594887383)]
    [InlineData(0.1, 0.5, 0.9608475252)]
    [InlineData(0.1, 1, 0.7956517280)]
    [InlineData(0.1, 2, 0.5423378253)]
    public void Distance_BistableSolution_MatchesTable(double zeta, double time, double expected)
    {
        var error = ObservedOrder.Measure([1.0 / 1000, 1.0 / 2000, 1.0 / 4000], size =>
        {
            var grid = new Grid(new Axis(new Interval(-5, 5), (int)Math.Round(1 / size)));
            var equilibrium = grid.X.Centers().Select(x => Math.Pow(Math.Cosh(x), 2) * Math.Exp(-zeta * Math.Cosh(2 * x))).ToArray();
            var density = grid.X.Centers().Select((x, i) => equilibrium[i] * (1 + Math.Exp(-4 * zeta * time) * Math.Tanh(x))).ToArray();
            return Math.Abs(LineTransport.Distance(new Density(grid, density), new Density(grid, equilibrium)) - expected);
        });
        Assert.True(error.Errors[^1] < 2e-6, error.ToString());
        error.AssertAtLeast(1.8);
    }

    private static Density Gaussian(double mean, double deviation, int cells)
    {
        var grid = new Grid(new Axis(new Interval(-8, 8), cells));
        return new Density(grid, [.. grid.X.Centers().Select(x => Math.Exp(-0.5 * Math.Pow((x - mean) / deviation, 2)))]).Normalised();
    }
}
