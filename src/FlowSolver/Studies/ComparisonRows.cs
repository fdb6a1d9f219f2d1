using FlowSolver.Diagnostics;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>Whether a row describes a density on the grid or an ensemble of walkers.</summary>
public enum SeriesKind
{
    /// <summary>A density on the grid.</summary>
    Flow,

    /// <summary>An ensemble of walkers.</summary>
    Ensemble,
}

/// <summary>One method at one report time: a row of <c>series.csv</c>. Null where a quantity does not exist.</summary>
/// <param name="Time">Report time.</param>
/// <param name="Method">Scheme or sampler.</param>
/// <param name="Kind">Density or ensemble.</param>
/// <param name="Moments">Mass, mean and covariance.</param>
/// <param name="Entropy">−∫ρ log ρ.</param>
/// <param name="FreeEnergy">F.</param>
/// <param name="RelativeEntropy">KL(ρ|π).</param>
/// <param name="FisherInformation">Relative Fisher information ∫ρ|∇log(ρ/π)|², so that dF/dt = −M·T²·I along the exact flow.</param>
/// <param name="DistanceToExact">W2 to the exact flow at that time, with bounds.</param>
/// <param name="TotalVariationToExact">½∫|ρ − ρ_exact|.</param>
/// <param name="DistanceToEquilibrium">W2 to π, with bounds.</param>
public sealed record SeriesRow(
    double Time, string Method, SeriesKind Kind, Moments Moments, double? Entropy, double? FreeEnergy, double? RelativeEntropy,
    double? FisherInformation, TransportBracket? DistanceToExact, double? TotalVariationToExact, TransportBracket? DistanceToEquilibrium = null);

/// <summary>One step of one method: a row of <c>steps.csv</c>.</summary>
/// <param name="Method">Scheme.</param>
/// <param name="Step">Step number, from 1.</param>
/// <param name="Time">Time after the step.</param>
/// <param name="Iterations">Iterations, or matrix products for the exact flow.</param>
/// <param name="Residual">What the iteration left over.</param>
/// <param name="DualGap">Relative duality gap of a certified step.</param>
/// <param name="StepDistance">W2 moved by the step.</param>
/// <param name="FreeEnergy">F after the step.</param>
public sealed record StepRow(
    string Method, int Step, double Time, int Iterations, double? Residual, double? DualGap, double? StepDistance, double FreeEnergy);

/// <summary>What a sampler's error at a report time is made of: a row of <c>budget.csv</c>. Null where a quantity does not exist.</summary>
/// <param name="Time">Report time.</param>
/// <param name="Sampler">Sampler.</param>
/// <param name="Total">W2(ensemble, exact flow).</param>
/// <param name="StepBias">W2(law of the sampler on the grid, exact flow).</param>
/// <param name="NoiseMean">Mean of W2(N exact draws, density) over simulated draws.</param>
/// <param name="Noise95">95 % point of the same.</param>
/// <param name="GridError">Estimate of the yardstick's own W2 error from half the cells.</param>
/// <param name="PValue">Share of simulated draws of the exact law whose distance is at least <paramref name="Total"/> (add-one rule).</param>
/// <param name="Verdict">In words: <c>within noise</c>, <c>biased by the step</c>, <c>wrong law</c> and the like.</param>
public sealed record BudgetRow(
    double Time, string Sampler, double? Total, double? StepBias, double? NoiseMean, double? Noise95, double? GridError, double? PValue, string Verdict);

/// <summary>The densities of one method at every report time that it reached.</summary>
/// <param name="Method">Scheme.</param>
/// <param name="Densities">One a report time, from the first on; shorter than the plan when the run was stopped.</param>
public sealed record DensityHistory(string Method, IReadOnlyList<Density> Densities);

/// <summary>Some walkers of one sampler at every report time, for pictures.</summary>
/// <param name="Sampler">Sampler.</param>
/// <param name="X">First coordinates: one array a report time, the first so many walkers of the ensemble.</param>
/// <param name="Y">Second coordinates; empty arrays in one dimension.</param>
public sealed record WalkerHistory(string Sampler, IReadOnlyList<double[]> X, IReadOnlyList<double[]> Y);

/// <summary>Something that the reader must know.</summary>
/// <param name="Method">Scheme or sampler; null when it concerns the whole run.</param>
/// <param name="Time">When; null when it has no time.</param>
/// <param name="Text">One sentence.</param>
/// <param name="IsFailure">Whether the results of the method can no longer be trusted from that time on (exit status 3).</param>
public sealed record Remark(string? Method, double? Time, string Text, bool IsFailure);

/// <summary>Work and time spent by a method.</summary>
/// <param name="Method">Scheme or sampler.</param>
/// <param name="Steps">Steps taken.</param>
/// <param name="Iterations">Iterations in all.</param>
/// <param name="Seconds">Wall-clock seconds.</param>
public sealed record WorkRow(string Method, long Steps, long Iterations, double Seconds);

/// <summary>Everything that a run found.</summary>
public sealed record ComparisonResult
{
    /// <summary>The problem.</summary>
    public required Problem Problem { get; init; }

    /// <summary>The grid.</summary>
    public required Grid Grid { get; init; }

    /// <summary>Report times and steps.</summary>
    public required TimePlan Plan { get; init; }

    /// <summary>Equilibrium on the grid.</summary>
    public required Density Equilibrium { get; init; }

    /// <summary>F at equilibrium.</summary>
    public required double EquilibriumFreeEnergy { get; init; }

    /// <summary>Rows of <c>series.csv</c>, by time and then in the order of the catalogue.</summary>
    public required IReadOnlyList<SeriesRow> Series { get; init; }

    /// <summary>Rows of <c>steps.csv</c>, by method and then step.</summary>
    public required IReadOnlyList<StepRow> Steps { get; init; }

    /// <summary>Rows of <c>budget.csv</c>, by time and then sampler.</summary>
    public required IReadOnlyList<BudgetRow> Budget { get; init; }

    /// <summary>W2 between the exact flow and its estimate from half the cells (Richardson), one a report time; null where there is none.</summary>
    public required IReadOnlyList<double?> GridErrors { get; init; }

    /// <summary>Densities of every flow method.</summary>
    public required IReadOnlyList<DensityHistory> Densities { get; init; }

    /// <summary>Walkers kept for pictures.</summary>
    public required IReadOnlyList<WalkerHistory> Walkers { get; init; }

    /// <summary>Warnings and failures.</summary>
    public required IReadOnlyList<Remark> Remarks { get; init; }

    /// <summary>Work by method.</summary>
    public required IReadOnlyList<WorkRow> Work { get; init; }

    /// <summary>How each estimated quantity was estimated: name and sentence.</summary>
    public required IReadOnlyDictionary<string, string> Estimators { get; init; }

    /// <summary>Walkers in each ensemble; 0 when there are none.</summary>
    public required int WalkerCount { get; init; }

    /// <summary>Seed of the ensembles.</summary>
    public required ulong Seed { get; init; }

    /// <summary>Threads used.</summary>
    public required int Threads { get; init; }

    /// <summary>Whether the run was interrupted before its end; then everything holds what had been finished.</summary>
    public required bool Interrupted { get; init; }

    /// <summary>Published bounds along the run; empty where they were not asked for.</summary>
    public IReadOnlyList<BoundCurve> Bounds { get; init; } = [];

    /// <summary>Whether any method failed.</summary>
    public bool HasFailures => Remarks.Any(remark => remark.IsFailure);
}
