using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Grids;

/// <summary>
/// A problem on a grid: V at the centres, the equilibrium, and the discrete free energy that schemes decrease and diagnostics record. Immutable.
/// </summary>
/// <remarks>
/// Equilibrium is π_i ∝ e^(−V(x_i)/T): for a smooth V the midpoint rule is accurate beyond all powers of the cell width, so that Z, moments and
/// free energy at equilibrium carry hardly any grid error. With F_h(ρ) = Σ |cell| ρ_i (V_i + T log ρ_i), F_h(ρ) − F_h(π) = T·KL(ρ|π) holds exactly.
/// </remarks>
public sealed class GridProblem
{
    /// <summary>Evaluates the potential on a grid.</summary>
    /// <exception cref="InputException">V is not finite at the centre of a cell; the sentence names the place.</exception>
    public GridProblem(Problem problem, Grid grid)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(grid);
        Require.That(problem.Dimension == grid.Dimension,
            $"The problem has dimension {problem.Dimension} and the grid {grid.Dimension}; they must agree.");
        Problem = problem;
        Grid = grid;
        CellPotential = grid.Sample(problem.Potential.Value);
        var least = double.PositiveInfinity;
        for (var i = 0; i < CellPotential.Length; i++)
        {
            if (!double.IsFinite(CellPotential[i]))
                throw NotFinite(i);
            least = Math.Min(least, CellPotential[i]);
        }

        LeastPotential = least;
        var weights = new double[CellPotential.Length];
        for (var i = 0; i < weights.Length; i++)
            weights[i] = Math.Exp(-(CellPotential[i] - least) / problem.Temperature);
        var partition = SpanKernels.Sum(weights) * grid.CellVolume;
        SpanKernels.Scale(weights, 1 / partition);
        Equilibrium = new Density(grid, weights);
        LogPartition = Math.Log(partition) - least / problem.Temperature;
    }

    /// <summary>The problem.</summary>
    public Problem Problem { get; }

    /// <summary>The grid.</summary>
    public Grid Grid { get; }

    /// <summary>V at the cell centres, x fastest, in units of energy.</summary>
    public double[] CellPotential { get; }

    /// <summary>Least entry of <see cref="CellPotential"/>.</summary>
    public double LeastPotential { get; }

    /// <summary>π, normalised. May underflow to 0 where V is far above its least value; <see cref="LogEquilibrium"/> does not.</summary>
    public Density Equilibrium { get; }

    /// <summary>log Z, Z = ∫ e^(−V/T).</summary>
    public double LogPartition { get; }

    /// <summary>F at equilibrium, −T log Z.</summary>
    public double EquilibriumFreeEnergy => -Problem.Temperature * LogPartition;

    /// <summary>log π in cell <paramref name="cell"/>.</summary>
    public double LogEquilibrium(int cell) => -CellPotential[cell] / Problem.Temperature - LogPartition;

    /// <summary>−∫ ρ log ρ, with 0 log 0 = 0.</summary>
    public double Entropy(ReadOnlySpan<double> density)
    {
        Require.Length(density.Length, Grid.CellCount);
        return -BlockedSum(density, 0) * Grid.CellVolume;
    }

    /// <summary>∫ ρV.</summary>
    public double PotentialEnergy(ReadOnlySpan<double> density) => SpanKernels.Dot(density, CellPotential) * Grid.CellVolume;

    /// <summary>F(ρ) = ∫ρV + T∫ρ log ρ, in units of energy.</summary>
    public double FreeEnergy(ReadOnlySpan<double> density) => PotentialEnergy(density) - Problem.Temperature * Entropy(density);

    /// <summary>KL(ρ|π) = ∫ρ log(ρ/π) for a density of mass 1; formed cell by cell so that it keeps its relative accuracy near equilibrium.</summary>
    public double RelativeEntropy(ReadOnlySpan<double> density)
    {
        Require.Length(density.Length, Grid.CellCount);
        return BlockedSum(density, 1) * Grid.CellVolume;
    }

    // Kind 0: Σ ρ log ρ. Kind 1: Σ ρ log(ρ/π) − ρ + π, whose terms are all ≥ 0, so that nothing cancels when ρ is close to π.
    private double BlockedSum(ReadOnlySpan<double> density, int kind)
    {
        Span<double> part = stackalloc double[8];
        part.Clear();
        var equilibrium = Equilibrium.Values;
        for (var i = 0; i < density.Length; i++)
        {
            var rho = density[i];
            double term;
            if (kind == 0)
            {
                term = rho > 0 ? rho * Math.Log(rho) : 0;
            }
            else if (!(rho > 0))
            {
                term = equilibrium[i];
            }
            else
            {
                var ratio = (rho - equilibrium[i]) / equilibrium[i];
                term = equilibrium[i] > 1e-290 && Math.Abs(ratio) < 0.1
                    ? equilibrium[i] * EntropyTerm(ratio)
                    : rho * (Math.Log(rho) - LogEquilibrium(i)) - rho + equilibrium[i];
            }

            part[i & 7] += term;
        }

        return SpanKernels.Sum(part);
    }

    // (1+r) log(1+r) − r by its series for small r: Σ_{k≥2} (−r)^k / (k(k−1)).
    private static double EntropyTerm(double r)
    {
        var sum = 0.0;
        for (var k = 18; k >= 2; k--)
            sum = sum * -r + 1.0 / (k * (k - 1.0));
        return sum * r * r;
    }

    private InputException NotFinite(int cell)
    {
        var x = Grid.X.Center(cell % Grid.Nx);
        var place = Grid.Y is null ? FormattableString.Invariant($"x = {x}") : FormattableString.Invariant($"x = {x}, y = {Grid.Y.Center(cell / Grid.Nx)}");
        var found = CellPotential[cell];
        var shown = double.IsNaN(found) ? "not a number" : found > 0 ? "infinite" : "minus infinity";
        return new InputException(new InputFault(
            $"The potential was {shown} at {place}; it must be finite on the whole domain.",
            "Shrink the domain or change the formula.", Key: "energy.potential"));
    }
}
