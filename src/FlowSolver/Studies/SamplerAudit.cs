using FlowSolver.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>Samples of somebody's sampler that claim to follow the case's law.</summary>
/// <param name="Name">How the reader knows them, such as the file's name.</param>
/// <param name="Time">The time whose law they claim; null for equilibrium.</param>
/// <param name="X">First coordinates.</param>
/// <param name="Y">Second coordinates; null in one dimension.</param>
public sealed record AuditSamples(string Name, double? Time, double[] X, double[]? Y);

/// <summary>How an audit is done.</summary>
public sealed record AuditOptions
{
    /// <summary>Whether the samples are one long chain in the order of the rows, instead of independent walkers.</summary>
    public bool IsChain { get; init; }

    /// <summary>Simulated sample sets behind each p-value.</summary>
    public int NoiseDraws { get; init; } = 399;

    /// <summary>p-value below which the verdict is "differs"; shared among the sets by Holm's rule (S. Holm, Scand. J. Statist. 6 (1979) 65-70).</summary>
    public double Level { get; init; } = 0.05;

    /// <summary>Seed of the simulated sets.</summary>
    public ulong Seed { get; init; } = 1;

    /// <summary>Whether to look for the cause where the verdict is "differs".</summary>
    public bool SeeksCause { get; init; } = true;
}

/// <summary>A law that the samples may follow instead.</summary>
/// <param name="Name">Short name, such as <c>another temperature</c>.</param>
/// <param name="Sentence">What it would mean, with the fitted value.</param>
/// <param name="Value">The fitted value; null where there is none.</param>
/// <param name="Distance">W2 between the samples and the law.</param>
/// <param name="Explains">Whether the distance is within the noise (95 %).</param>
public sealed record AuditAlternative(string Name, string Sentence, double? Value, double Distance, bool Explains);

/// <summary>What was found about one sample set: a row of <c>audit.csv</c>.</summary>
/// <param name="Samples">Name of the set.</param>
/// <param name="Time">Its time; null for equilibrium.</param>
/// <param name="Count">Samples.</param>
/// <param name="EffectiveCount">Independent samples that a chain is worth; null for independent walkers.</param>
/// <param name="Distance">W2 to the law; null where it cannot be measured.</param>
/// <param name="NoiseMean">Mean of the same distance for simulated sets of the right law.</param>
/// <param name="Noise95">95 % point of the same.</param>
/// <param name="PValue">p-value.</param>
/// <param name="GridError">W2 error estimate of the law itself; null where there is none.</param>
/// <param name="Verdict"><c>agrees</c>, <c>differs</c> or <c>not measured</c>.</param>
/// <param name="Cause">The likely cause in one sentence; empty where nothing differs.</param>
/// <param name="Alternatives">Laws that were tried, nearest first.</param>
/// <param name="Notes">What was seen in the rows themselves: duplicates, rounding, positions outside, burn-in.</param>
/// <param name="Law">The law on the grid.</param>
/// <param name="NoiseDistances">The simulated distances, in increasing order; empty where none were simulated.</param>
/// <param name="Curves">Where samples and law differ, by axis.</param>
public sealed record AuditRow(
    string Samples, double? Time, int Count, double? EffectiveCount, double? Distance, double? NoiseMean, double? Noise95, double? PValue, double? GridError,
    string Verdict, string Cause, IReadOnlyList<AuditAlternative> Alternatives, IReadOnlyList<string> Notes, Density Law,
    IReadOnlyList<double> NoiseDistances, IReadOnlyList<AuditCurves> Curves);

/// <summary>
/// Holds samples against the law of a case: distance, noise floor, p-value, verdict, and the likely cause where they differ.
/// </summary>
/// <remarks>
/// The p-value is the share of simulated sets of the right law, of the same size (for a chain: of the same autocorrelation time), that lie at least as
/// far from it, by the add-one rule. The cause is sought among laws that a common mistake would produce; each is reported with its own distance, so
/// that the reader sees how well it explains the samples. Several may explain them equally well: then they cannot be told apart by these samples.
/// </remarks>
public static class SamplerAudit
{
    /// <summary>Audits sample sets.</summary>
    /// <param name="problem">The case's problem.</param>
    /// <param name="grid">Its grid.</param>
    /// <param name="plan">Its times; the step is the one at which integrator bias is described.</param>
    /// <param name="sets">Sample sets.</param>
    /// <param name="options">How.</param>
    /// <param name="team">Threads.</param>
    /// <param name="progress">Called with the number of sets done.</param>
    /// <param name="cancellation">Stops the audit.</param>
    /// <exception cref="InputException">A set is empty or of the wrong dimension.</exception>
    /// <exception cref="OperationCanceledException">Cancelled.</exception>
    public static IReadOnlyList<AuditRow> Run(
        Problem problem, Grid grid, TimePlan plan, IReadOnlyList<AuditSamples> sets, AuditOptions options, WorkerTeam team,
        IProgress<int>? progress = null, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(grid);
        ArgumentNullException.ThrowIfNull(sets);
        ArgumentNullException.ThrowIfNull(options);
        ArgumentNullException.ThrowIfNull(team);
        var onGrid = new GridProblem(problem, grid);
        var rows = new List<AuditRow>();
        foreach (var set in sets)
        {
            cancellation.ThrowIfCancellationRequested();
            rows.Add(Measure(onGrid, set, options, team, cancellation));
            progress?.Report(rows.Count);
        }

        Judge(rows, options.Level);
        if (options.SeeksCause)
        {
            for (var i = 0; i < rows.Count; i++)
            {
                if (rows[i].Verdict != "differs")
                    continue;
                cancellation.ThrowIfCancellationRequested();
                var (cause, alternatives) = AuditCauses.Seek(onGrid, plan, sets[i], rows[i], team, cancellation);
                rows[i] = rows[i] with { Cause = cause, Alternatives = alternatives };
            }
        }

        return rows;
    }

    /// <summary>The case's law at a time, on the grid; equilibrium for null.</summary>
    internal static Density LawAt(GridProblem problem, double? time, WorkerTeam team)
    {
        if (time is not { } t)
            return problem.Equilibrium;
        var start = StartOnGrid.Create(problem.Problem.Start, problem.Grid);
        if (t <= 0)
            return start;
        using var run = new ExactFlowScheme().Begin(problem, start, team);
        run.Advance(t);
        return run.Snapshot();
    }

    private static AuditRow Measure(GridProblem problem, AuditSamples set, AuditOptions options, WorkerTeam team, CancellationToken cancellation)
    {
        Require.That(set.X.Length > 0, $"The sample set {set.Name} was empty; it must hold at least one sample.");
        Require.That(set.Y is null == (problem.Grid.Dimension == 1), $"The sample set {set.Name} and the case differ in dimension; they must agree.");
        var law = LawAt(problem, set.Time, team);
        var notes = SampleNotes.Of(set, problem.Problem.Domain, options.IsChain).ToList();
        var effective = (double?)null;
        NoiseFloor? floor;
        if (options.IsChain && set.X.Length > 1)
        {
            var slowest = SampleNotes.Slowest(set);
            effective = Math.Min(set.X.Length, set.X.Length / slowest.Time);
            if (!slowest.IsReliable)
                notes.Add(FormattableString.Invariant($"The chain is shorter than 50 autocorrelation times ({slowest.Time:g3} steps each): its noise cannot be judged, and the p-value is only a hint."));
            floor = ChainNoise.Simulate(law, set.X.Length, Math.Max(slowest.Time, 1), options.NoiseDraws, options.Seed, team, cancellation)
                ?? NoiseFloor.Simulate(law, Math.Max(1, (int)effective.Value), options.NoiseDraws, options.Seed, team, cancellation);
        }
        else
        {
            floor = NoiseFloor.Simulate(law, set.X.Length, options.NoiseDraws, options.Seed, team, cancellation);
        }

        var distance = SampleDistance.Between(set.X, set.Y ?? [], law, team)?.Distance;
        return new AuditRow(
            set.Name, set.Time, set.X.Length, effective, distance, floor?.Mean, floor?.Percentile95,
            distance is { } d && floor is not null ? floor.PValue(d) : null, GridError(problem, law, set.Time, team),
            "not measured", "", [], notes, law, floor is null ? [] : floor.Distances.ToArray(), AuditCurves.Of(set, law, effective ?? set.X.Length));
    }

    private static double? GridError(GridProblem problem, Density law, double? time, WorkerTeam team)
    {
        if (time is not > 0 || problem.Grid.Halved() is null)
            return null;
        var half = ExactFlowYardstick.RunOnHalf(problem, new TimePlan(time.Value, [time.Value]), team);
        return half is null ? null : DensityDistance.Between(half[^1], law, team)?.Distance * ExactFlowYardstick.RichardsonShare;
    }

    // Holm: the smallest p against level/n, the next against level/(n−1), until one stands.
    private static void Judge(List<AuditRow> rows, double level)
    {
        var measured = rows.Where(row => row.PValue is not null).OrderBy(row => row.PValue).ToList();
        var standing = false;
        for (var k = 0; k < measured.Count; k++)
        {
            // Simulated p-values cannot fall below 1/(draws + 1); a set farther out than that from every simulated one still counts.
            var share = level / (measured.Count - k);
            standing |= measured[k].PValue > share && !(measured[k].Distance > 1.5 * measured[k].Noise95);
            rows[rows.IndexOf(measured[k])] = measured[k] with { Verdict = standing ? "agrees" : "differs" };
        }
    }
}
