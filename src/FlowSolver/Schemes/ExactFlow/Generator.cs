using System.Globalization;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// The drift-diffusion equation in space: jump rates between neighbouring cells, dρ_i/dt = Σ_j (r_ji ρ_j − r_ij ρ_i) = (Aρ)_i. Immutable and
/// safe to use from several threads.
/// </summary>
/// <remarks>
/// Exponentially fitted finite volumes. The rate from cell i to its neighbour j is
/// <code>r_ij = (M T/h²) · e^(−(V_j − V_i)/2T) / ⟨e^((V − (V_i + V_j)/2)/T)⟩,</code>
/// the mean taken over the segment between the two centres: the flux between the cells is that of the stationary equation on the segment. With V
/// linear on it this is (MT/h²)·B((V_j − V_i)/T), B(z) = z/(e^z − 1) (D. Scharfetter, H. Gummel, IEEE Trans. Electron Devices 16 (1969) 64-77;
/// J. Chang, G. Cooper, J. Comput. Phys. 6 (1970) 1-16). Here V is taken linear on each quarter of the segment and every quarter is integrated
/// exactly. In one dimension the segment is also cut at kinks and jumps of V, so that |x| is exact and a jump gives the harmonic mean. A landscape
/// in two dimensions that is not smooth, and one whose kinks are not known, is integrated on sixteen pieces of the segment, each with the value and slope at its middle.
/// <para>Kept exactly: r_ij e^(−V_i/T) = r_ji e^(−V_j/T) (detailed balance with π at the centres), rates ≥ 0 (ρ stays positive), Σ_i (Aρ)_i = 0
/// (mass). Second order in h on smooth problems. A is similar to the symmetric matrix with entries √(r_ij r_ji) off and −Σ_j r_ij on the
/// diagonal; its eigenvalues lie in [−<see cref="SpectralBound"/>, 0].</para>
/// </remarks>
public sealed class Generator
{
    // Squares of rates must not overflow in the complex solves.
    private const double LargestRate = 1e130;
    private readonly double[] right;
    private readonly double[] left;
    private readonly double[] up;
    private readonly double[] down;
    private readonly double[] exit;

    /// <summary>Computes the rates.</summary>
    /// <param name="problem">The problem on its grid.</param>
    /// <param name="team">Threads to use; the rates do not depend on their number.</param>
    /// <exception cref="InputException">V changes so steeply between two cells that the rate between them overflows; the sentence names the place.</exception>
    public Generator(GridProblem problem, WorkerTeam? team = null)
    {
        ArgumentNullException.ThrowIfNull(problem);
        Problem = problem;
        var grid = problem.Grid;
        right = new double[grid.CellCount];
        left = new double[grid.CellCount];
        up = new double[grid.Y is null ? 0 : grid.CellCount];
        down = new double[up.Length];
        exit = new double[grid.CellCount];
        team ??= WorkerTeam.Alone;
        team.Run(grid.Ny, FillRow);
        if (grid.Y is null)
            RefineAtKinks();
        team.Run(grid.Ny, AddExits);
        var bound = 0.0;
        for (var cell = 0; cell < exit.Length; cell++)
        {
            if (!(exit[cell] < LargestRate))
                throw TooSteep(cell);
            bound = Math.Max(bound, exit[cell] + Couplings(cell));
        }

        SpectralBound = bound * (1 + 1e-12);
    }

    /// <summary>The problem on its grid.</summary>
    public GridProblem Problem { get; }

    /// <summary>The grid.</summary>
    public Grid Grid => Problem.Grid;

    /// <summary>Rate from each cell to its right neighbour (the first of the row from the last one on a periodic axis); 0 at a wall. In 1/time.</summary>
    public ReadOnlySpan<double> RateRight => right;

    /// <summary>Rate from each cell to its left neighbour; 0 at a wall.</summary>
    public ReadOnlySpan<double> RateLeft => left;

    /// <summary>Rate from each cell to the one above (next row); 0 at a wall. Empty in one dimension.</summary>
    public ReadOnlySpan<double> RateUp => up;

    /// <summary>Rate from each cell to the one below (row before); 0 at a wall. Empty in one dimension.</summary>
    public ReadOnlySpan<double> RateDown => down;

    /// <summary>Sum of the rates out of each cell.</summary>
    public ReadOnlySpan<double> ExitRate => exit;

    /// <summary>Λ: all eigenvalues of A lie in [−Λ, 0], by Gershgorin's circles of the symmetric form. In 1/time.</summary>
    public double SpectralBound { get; }

    /// <summary>The cell to the right, with the wrap of a periodic axis; meaningful where the rate is not 0.</summary>
    public int RightOf(int cell) => cell % Grid.Nx == Grid.Nx - 1 ? cell - Grid.Nx + 1 : cell + 1;

    /// <summary>The cell above, with the wrap of a periodic axis; meaningful where the rate is not 0.</summary>
    public int Above(int cell) => cell >= Grid.CellCount - Grid.Nx ? cell - (Grid.CellCount - Grid.Nx) : cell + Grid.Nx;

    /// <summary>√(r_ij r_ji) for the edge to the right: the symmetric form's off-diagonal entry.</summary>
    public double CouplingRight(int cell) => Math.Sqrt(right[cell]) * Math.Sqrt(left[RightOf(cell)]);

    /// <summary>√(r_ij r_ji) for the edge upwards: the symmetric form's off-diagonal entry.</summary>
    public double CouplingUp(int cell) => Math.Sqrt(up[cell]) * Math.Sqrt(down[Above(cell)]);

    /// <summary>target ← Aρ: the rate of change of a density.</summary>
    /// <exception cref="ArgumentException">A length differs from the cell count.</exception>
    public void Apply(ReadOnlySpan<double> density, Span<double> target)
    {
        Require.Length(density.Length, exit.Length);
        Require.Length(target.Length, exit.Length);
        var (nx, count) = (Grid.Nx, exit.Length);
        // Net fluxes edge by edge: what leaves one cell enters the other to the last bit, so that the sum over all cells is rounding alone.
        target.Clear();
        for (var cell = 0; cell < count; cell++)
        {
            var neighbour = cell % nx == nx - 1 ? cell - nx + 1 : cell + 1;
            var flux = right[cell] * density[cell] - left[neighbour] * density[neighbour];
            if (right[cell] == 0 && left[neighbour] == 0)
                continue;
            target[cell] -= flux;
            target[neighbour] += flux;
        }

        for (var cell = 0; cell < up.Length; cell++)
        {
            var neighbour = cell >= count - nx ? cell - (count - nx) : cell + nx;
            if (up[cell] == 0 && down[neighbour] == 0)
                continue;
            var flux = up[cell] * density[cell] - down[neighbour] * density[neighbour];
            target[cell] -= flux;
            target[neighbour] += flux;
        }
    }

    /// <summary>target ← Aᵀu: (Aᵀu)_i = Σ_j r_ij (u_j − u_i), the rate of change of an expectation as a function of the starting cell. 0 for a constant u.</summary>
    /// <exception cref="ArgumentException">A length differs from the cell count.</exception>
    public void ApplyBackward(ReadOnlySpan<double> function, Span<double> target)
    {
        Require.Length(function.Length, exit.Length);
        Require.Length(target.Length, exit.Length);
        var (nx, count) = (Grid.Nx, exit.Length);
        target.Clear();
        for (var cell = 0; cell < count; cell++)
        {
            var neighbour = cell % nx == nx - 1 ? cell - nx + 1 : cell + 1;
            var difference = function[neighbour] - function[cell];
            target[cell] += right[cell] * difference;
            target[neighbour] -= left[neighbour] * difference;
        }

        for (var cell = 0; cell < up.Length; cell++)
        {
            var neighbour = cell >= count - nx ? cell - (count - nx) : cell + nx;
            var difference = function[neighbour] - function[cell];
            target[cell] += up[cell] * difference;
            target[neighbour] -= down[neighbour] * difference;
        }
    }

    // Rates across the edges to the right of the cells of a row and upwards from them.
    private void FillRow(int row)
    {
        var grid = Grid;
        var first = row * grid.Nx;
        var lower = Problem.CellPotential.AsSpan(first, grid.Nx);
        var pieces = new SegmentPieces(Problem.Problem, grid);
        var upper = new double[grid.Nx];
        lower[1..].CopyTo(upper);
        upper[^1] = lower[0];
        pieces.Sample(row, alongX: true);
        var edges = grid.X.IsPeriodic ? grid.Nx : grid.Nx - 1;
        var back = new double[grid.Nx];
        pieces.Rates(lower, upper, right.AsSpan(first, grid.Nx), back, edges);
        back.AsSpan(0, grid.Nx - 1).CopyTo(left.AsSpan(first + 1));
        left[first] = back[^1];
        if (grid.Y is null || (row == grid.Ny - 1 && !grid.Y.IsPeriodic))
            return;
        var next = row == grid.Ny - 1 ? 0 : first + grid.Nx;
        pieces.Sample(row, alongX: false);
        pieces.Rates(lower, Problem.CellPotential.AsSpan(next, grid.Nx), up.AsSpan(first, grid.Nx), down.AsSpan(next, grid.Nx), grid.Nx);
    }

    private (double Forward, double Back) Rates(double potential, double neighbour, double logMean, double width)
    {
        var problem = Problem.Problem;
        var half = (neighbour - potential) / (2 * problem.Temperature);
        var scale = problem.Mobility * problem.Temperature / (width * width);
        return (scale * Math.Exp(-half - logMean), scale * Math.Exp(half - logMean));
    }

    private void RefineAtKinks()
    {
        var axis = Grid.X;
        var kinks = Problem.Problem.Potential.FindKinks(axis.Interval);
        if (kinks.Count == 0)
            return;
        var potential = Problem.CellPotential;
        var edges = axis.IsPeriodic ? axis.Cells : axis.Cells - 1;
        for (var i = 0; i < edges; i++)
        {
            var from = axis.Center(i);
            var neighbour = i == axis.Cells - 1 ? 0 : i + 1;
            var to = i == axis.Cells - 1 ? axis.Interval.To + axis.Width / 2 : axis.Center(i + 1);
            if (!HasKink(kinks, from, to, axis.Interval))
                continue;
            var logMean = SegmentPieces.KinkedLogMean(Problem.Problem, axis.Interval, from, to, potential[i], potential[neighbour], kinks);
            (right[i], left[neighbour]) = Rates(potential[i], potential[neighbour], logMean, axis.Width);
        }
    }

    private static bool HasKink(IReadOnlyList<Kink> kinks, double from, double to, Interval interval)
    {
        foreach (var kink in kinks)
        {
            if ((kink.Position >= from && kink.Position <= to)
                || (to > interval.To && (kink.Position + interval.Length <= to || kink.Position == interval.To)))
            {
                return true;
            }
        }

        return false;
    }

    private void AddExits(int row)
    {
        for (var cell = row * Grid.Nx; cell < (row + 1) * Grid.Nx; cell++)
            exit[cell] = right[cell] + left[cell] + (up.Length == 0 ? 0 : up[cell] + down[cell]);
    }

    private double Couplings(int cell)
    {
        var column = cell % Grid.Nx;
        var sum = CouplingRight(cell) + CouplingRight(column == 0 ? cell + Grid.Nx - 1 : cell - 1);
        if (up.Length == 0)
            return sum;
        return sum + CouplingUp(cell) + CouplingUp(cell < Grid.Nx ? cell + (Grid.CellCount - Grid.Nx) : cell - Grid.Nx);
    }

    private InputException TooSteep(int cell)
    {
        var grid = Grid;
        var place = grid.Y is null
            ? string.Create(CultureInfo.InvariantCulture, $"x = {grid.X.Center(cell)}")
            : string.Create(CultureInfo.InvariantCulture, $"x = {grid.X.Center(cell % grid.Nx)}, y = {grid.Y.Center(cell / grid.Nx)}");
        return new InputException(new InputFault(
            $"The potential is so steep near {place} that the rate out of the cell there overflows; it must change by less than about 1e120 temperatures over one cell.",
            "Shrink the domain or change the formula.", Key: "energy.potential"));
    }
}
