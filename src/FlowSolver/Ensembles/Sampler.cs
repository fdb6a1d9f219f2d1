using System.Runtime.CompilerServices;
using FlowSolver.Foundation;
using FlowSolver.Problems;
using FlowSolver.Schemes;

namespace FlowSolver.Ensembles;

/// <summary>What a sampler is; the catalogue, tables and page read it.</summary>
/// <param name="Name">The name in a case file, such as <c>proximal-ula</c>.</param>
/// <param name="Summary">One sentence for the reader.</param>
/// <param name="Law">The scheme that advances the sampler's law on the grid; null where there is none, and then step bias cannot be told apart.</param>
/// <param name="WeakOrder">Order of its bias in τ on smooth problems; null where it has none.</param>
/// <param name="Source">Published source.</param>
public sealed record SamplerTraits(string Name, string Summary, FlowScheme? Law, int? WeakOrder, string Source);

/// <summary>What one step of an ensemble did.</summary>
/// <param name="Failure">One sentence when the walkers cannot be used any more (blow-up); null otherwise.</param>
/// <param name="Warning">One sentence when something should be known though the step stands; null otherwise.</param>
/// <param name="AcceptanceRate">Share of proposals accepted, for Metropolis-adjusted samplers; null elsewhere.</param>
public readonly record struct EnsembleReport(string? Failure = null, string? Warning = null, double? AcceptanceRate = null);

/// <summary>
/// A way to advance walkers: a small immutable object with its options. Adding one:
/// <list type="number">
/// <item>When a step is maps and Gaussian noise, derive from <see cref="RecipeSampler"/> and give the recipe; name the grid scheme of the same recipe as its
/// law. That is all. Otherwise derive from this type, in a file of its own; its doc block gives: one sentence; the update formula with symbols tied to
/// parameter names; the bias and its order; when it blows up; what happens at walls; cost of a step; source and departures.</item>
/// <item>Derive its <see cref="EnsembleRun"/>, which holds all working memory: a step allocates nothing. Random numbers come from <see cref="RandomStreams"/> by
/// the walker's number and the step, so that nothing depends on threads. A blow-up is reported as a failure before anything is infinite.</item>
/// <item>Add one row to <see cref="SamplerCatalogue"/>: the shared tests then run it (same bytes, walls, circles, no allocation, its law on the grid).</item>
/// <item>Add its stationary variance on a quadratic to the table in the tests, with the mutation that you tried and saw fail.</item>
/// </list>
/// </summary>
public abstract class Sampler
{
    /// <summary>What the sampler is.</summary>
    public abstract SamplerTraits Traits { get; }

    /// <summary>Starts a run of walkers drawn from the problem's start.</summary>
    /// <param name="problem">The problem.</param>
    /// <param name="walkers">Number of walkers, at least 1.</param>
    /// <param name="seed">Seed: the same seed gives the same walkers at any number of threads.</param>
    /// <param name="team">Threads to use.</param>
    public abstract EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team);
}

/// <summary>Walkers on their way through time under one sampler. Not safe for use from two threads at once.</summary>
public abstract class EnsembleRun
{
    /// <summary>Keeps the problem and allocates the walkers.</summary>
    protected EnsembleRun(Problem problem, int walkers, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(team);
        Problem = problem;
        Team = team;
        Count = Require.AtLeast(walkers, 1);
        (storageX, offsetX) = AlignedArray(walkers);
        (storageY, offsetY) = problem.Dimension == 2 ? AlignedArray(walkers) : ([], 0);
    }

    private readonly double[] storageX;
    private readonly double[] storageY;
    private readonly int offsetX;
    private readonly int offsetY;

    /// <summary>The problem.</summary>
    public Problem Problem { get; }

    /// <summary>Number of walkers.</summary>
    public int Count { get; }

    /// <summary>Time reached.</summary>
    public double Time { get; private set; }

    /// <summary>Steps taken.</summary>
    public int StepsTaken { get; private set; }

    /// <summary>First coordinates of the walkers now.</summary>
    public ReadOnlySpan<double> X => WalkersX;

    /// <summary>Second coordinates; empty in one dimension.</summary>
    public ReadOnlySpan<double> Y => WalkersY;

    /// <summary>First coordinates, for the sampler to write; they begin on a cache line.</summary>
    protected Span<double> WalkersX => storageX.AsSpan(offsetX, Count);

    /// <summary>Second coordinates, for the sampler to write; empty in one dimension.</summary>
    protected Span<double> WalkersY => storageY.Length > 0 ? storageY.AsSpan(offsetY, Count) : [];

    /// <summary>The threads.</summary>
    protected WorkerTeam Team { get; }

    /// <summary>Takes one step.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="step"/> is not finite and above 0.</exception>
    public EnsembleReport Advance(double step)
    {
        var report = AdvanceCore(Require.Positive(step));
        Time += step;
        StepsTaken++;
        return report;
    }

    /// <summary>An array of numbers, all 0, whose elements from the offset on begin on a cache line and stay there.</summary>
    private protected static unsafe (double[] Storage, int Offset) AlignedArray(int length)
    {
        var storage = GC.AllocateArray<double>(length + 7, pinned: true);
        var address = (nuint)Unsafe.AsPointer(ref storage[0]);
        return (storage, (int)((0 - address) % 64) / sizeof(double));
    }

    /// <summary>Takes the step; the base keeps time and count. Allocates nothing.</summary>
    protected abstract EnsembleReport AdvanceCore(double step);
}
