using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes;

/// <summary>What a scheme is and promises; the catalogue, tables and page read it.</summary>
/// <param name="Name">The name in a case file, such as <c>split-proximal</c>.</param>
/// <param name="Summary">One sentence for the reader.</param>
/// <param name="OrderInTime">Order in τ on smooth problems; null for a scheme without a stepping error.</param>
/// <param name="OrderInSpace">Order in h on smooth problems.</param>
/// <param name="DecreasesFreeEnergy">Whether the discrete free energy never rises (up to rounding and stated tolerance).</param>
/// <param name="KeepsEquilibrium">Whether π itself is its stationary law (otherwise it has a step bias).</param>
/// <param name="Dimensions">1, 2 or both.</param>
/// <param name="Source">Published source.</param>
public sealed record SchemeTraits(
    string Name, string Summary, int? OrderInTime, int OrderInSpace, bool DecreasesFreeEnergy, bool KeepsEquilibrium,
    IReadOnlyList<int> Dimensions, string Source);

/// <summary>What one step did.</summary>
/// <param name="Iterations">Iterations, or matrix products for the exact flow.</param>
/// <param name="Residual">What the iteration left over, in the norm that the scheme states; null where there is no iteration.</param>
/// <param name="DualGap">(primal − dual)/(W2²/(2τ)) of a certified step; null elsewhere.</param>
/// <param name="StepDistance">W2 between the densities before and after; null where it is not computed.</param>
/// <param name="Failure">One sentence when the step cannot be trusted; null otherwise.</param>
/// <param name="Warning">One sentence when something should be known though the step stands; null otherwise.</param>
public readonly record struct StepReport(
    int Iterations = 0, double? Residual = null, double? DualGap = null, double? StepDistance = null, string? Failure = null, string? Warning = null);

/// <summary>
/// A way to advance a density: a small immutable object with its options. Adding one:
/// <list type="number">
/// <item>Derive a scheme in a file of its own under <c>Schemes/</c>; its doc block gives: one sentence; the update formula with symbols tied to
/// parameter names; order in time and space and under which assumptions; what is kept exactly; cost of a step; when to prefer another; tolerance
/// (which error, which norm, default); source and departures.</item>
/// <item>Derive its <see cref="FlowRun"/>, which holds all working memory: a step allocates nothing.</item>
/// <item>Add one row to <see cref="SchemeCatalogue"/>.</item>
/// <item>Add one test class that runs the shared conformance suite on it, with the mutation that you tried and saw fail.</item>
/// <item>Add its source to the bibliography, <c>src/FlowSolver/Sources.md</c>.</item>
/// </list>
/// Command line, tables, figures and page find it by the catalogue.
/// </summary>
public abstract class FlowScheme
{
    /// <summary>What the scheme is and promises.</summary>
    public abstract SchemeTraits Traits { get; }

    /// <summary>Starts a run.</summary>
    /// <param name="problem">The problem on its grid.</param>
    /// <param name="start">Density at time 0, of mass 1, on the same grid; copied.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <exception cref="ArgumentException">The scheme does not serve this dimension, or the grids differ.</exception>
    public FlowRun Begin(GridProblem problem, Density start, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(start);
        ArgumentNullException.ThrowIfNull(team);
        Require.That(Traits.Dimensions.Contains(problem.Grid.Dimension),
            $"The scheme {Traits.Name} was asked for in dimension {problem.Grid.Dimension}; it serves only {string.Join(" and ", Traits.Dimensions)}.");
        Require.That(start.Grid == problem.Grid, "The start density was on another grid; it must be on the problem's.");
        return CreateRun(problem, start, team);
    }

    /// <summary>Creates the run; arguments have been checked.</summary>
    protected abstract FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team);
}

/// <summary>A density on its way through time under one scheme. Not safe for use from two threads at once.</summary>
public abstract class FlowRun : IDisposable
{
    /// <summary>Keeps the problem.</summary>
    protected FlowRun(GridProblem problem, WorkerTeam team)
    {
        Problem = problem;
        Team = team;
    }

    /// <summary>The problem on its grid.</summary>
    public GridProblem Problem { get; }

    /// <summary>Time reached.</summary>
    public double Time { get; private set; }

    /// <summary>Steps taken.</summary>
    public int StepsTaken { get; private set; }

    /// <summary>The threads.</summary>
    protected WorkerTeam Team { get; }

    /// <summary>Takes one step of length <paramref name="step"/>. The exact flow takes any length in one step without a stepping error.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="step"/> is not finite and above 0.</exception>
    public StepReport Advance(double step)
    {
        var report = AdvanceCore(Require.Positive(step));
        Time += step;
        StepsTaken++;
        return report;
    }

    /// <summary>Writes the density now, as cell averages of mass 1, x fastest; length the grid's cell count.</summary>
    public abstract void WriteDensity(Span<double> destination);

    /// <summary>The density now, in a new array.</summary>
    public Density Snapshot()
    {
        var values = new double[Problem.Grid.CellCount];
        WriteDensity(values);
        return new Density(Problem.Grid, values);
    }

    /// <summary>Takes the step; the base keeps time and count. Allocates nothing.</summary>
    protected abstract StepReport AdvanceCore(double step);

    /// <summary>Gives back what the run holds beyond memory; by default nothing.</summary>
    protected virtual void Dispose(bool disposing) { }

    /// <inheritdoc/>
    public void Dispose()
    {
        Dispose(true);
        GC.SuppressFinalize(this);
    }
}
