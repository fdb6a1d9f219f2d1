using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Grids;

public sealed class GridProblemTests
{
    private static GridProblem Quadratic(int cells = 200) => new(
        new Problem(new PolynomialPotential(0.7, 0, 0.65), 0.5, new Domain(new Interval(-8, 8)), new GaussianStart(1, 0.3)),
        new Grid(new Axis(new Interval(-8, 8), cells)));

    // Z = √(2πT/λ) e^(−c/T) for V = c + λx²/2 (Gaussian integral). Tried: dropping the shift by the least potential from LogPartition.
    [Fact]
    public void LogPartition_Quadratic_IsTheGaussianIntegral()
        => Assert.Equal(0.5 * Math.Log(2 * Math.PI * 0.5 / 1.3) - 0.7 / 0.5, Quadratic().LogPartition, 13);

    [Fact]
    public void FreeEnergy_AnyDensity_IsEquilibriumPlusTemperatureTimesRelativeEntropy()
    {
        var problem = Quadratic();
        var density = StartOnGrid.Create(problem.Problem.Start, problem.Grid).Values;
        Assert.Equal(problem.FreeEnergy(density), problem.EquilibriumFreeEnergy + 0.5 * problem.RelativeEntropy(density), 12);
        Assert.Equal(problem.EquilibriumFreeEnergy, problem.FreeEnergy(problem.Equilibrium.Values), 13);
    }

    // KL of two normal densities (textbook); the second case is so close to equilibrium that a plain sum of ρ log(ρ/π) would lose all digits.
    [Theory]
    [InlineData(0.3, 1.0, 1e-12)]
    [InlineData(0.384615384615384615, 1e-7, 1e-6)]
    public void RelativeEntropy_OfANormalDensity_KeepsRelativeAccuracy(double variance, double mean, double relative)
    {
        var problem = Quadratic(400);
        var density = StartOnGrid.Create(new GaussianStart(mean, variance), problem.Grid).Values;
        var ratio = 1.3 * variance / 0.5;
        var expected = 0.5 * (ratio - 1 - Math.Log(ratio) + 1.3 * mean * mean / 0.5);
        Assert.InRange(problem.RelativeEntropy(density), expected * (1 - relative) - 1e-16, expected * (1 + relative) + 1e-16);
    }

    [Fact]
    public void Entropy_WithEmptyCells_CountsThemAsZero()
    {
        var problem = Quadratic();
        var density = new double[200];
        density[50] = 1 / problem.Grid.CellVolume;
        Assert.Equal(Math.Log(problem.Grid.CellVolume), problem.Entropy(density), 14);
    }

    [Fact]
    public void Constructor_PotentialNotFinite_NamesThePlace()
    {
        var problem = new Problem(new Singular(), 1, new Domain(new Interval(-1, 1)), new GaussianStart(0.5, 0.01));
        var exception = Assert.Throws<InputException>(() => new GridProblem(problem, new Grid(new Axis(new Interval(-1, 1), 5))));
        Assert.Contains("infinite at x = 0", exception.Message, StringComparison.Ordinal);
    }

    private sealed class Singular : Potential
    {
        public override int Dimension => 1;

        public override string Description => "1/|x|";

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = Math.Abs(x[i]) < 1e-12 ? double.PositiveInfinity : 1 / Math.Abs(x[i]);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY) => throw new NotSupportedException();

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target) => throw new NotSupportedException();
    }
}
