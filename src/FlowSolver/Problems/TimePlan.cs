using FlowSolver.Foundation;

namespace FlowSolver.Problems;

/// <summary>
/// When to report and how long the steps between two reports are. Every stepping method and every ensemble follows the same plan, so that they
/// can be compared step by step.
/// </summary>
/// <remarks>
/// The steps between two report times are equal and no longer than the step asked for; when the report interval is a multiple of the step (to
/// one part in 10⁹) they are exactly that step. Immutable.
/// </remarks>
public sealed class TimePlan
{
    /// <summary>Makes a plan.</summary>
    /// <param name="step">τ, above 0.</param>
    /// <param name="reportTimes">Increasing, first one 0 or above. A first time above 0 is preceded by a report at 0.</param>
    /// <exception cref="ArgumentException">The times are empty, not finite, negative or not increasing.</exception>
    public TimePlan(double step, IReadOnlyList<double> reportTimes)
    {
        ArgumentNullException.ThrowIfNull(reportTimes);
        Step = Require.Positive(step);
        Require.That(reportTimes.Count > 0, "The list of report times was empty; it must hold at least one time.");
        var times = new List<double>(reportTimes.Count + 1);
        if (Require.NotNegative(reportTimes[0], "first report time") > 0)
            times.Add(0);
        foreach (var time in reportTimes)
        {
            Require.Finite(time, "report time");
            Require.That(times.Count == 0 || time > times[^1], $"Report times were not increasing at {time}; each must be above the one before.");
            times.Add(time);
        }

        ReportTimes = times;
        var counts = new int[times.Count];
        for (var i = 1; i < counts.Length; i++)
            counts[i] = checked((int)Math.Max(1, Math.Ceiling((times[i] - times[i - 1]) / step * (1 - 1e-9))));
        stepCounts = counts;
    }

    private readonly int[] stepCounts;

    /// <summary>Evenly spaced reports from 0 to <paramref name="until"/>, both included.</summary>
    public static TimePlan Even(double step, double until, int reports)
    {
        Require.Positive(until);
        Require.AtLeast(reports, 2);
        var times = new double[reports];
        for (var i = 0; i < reports; i++)
            times[i] = i == reports - 1 ? until : until * ((double)i / (reports - 1));
        return new TimePlan(step, times);
    }

    /// <summary>τ as asked for.</summary>
    public double Step { get; }

    /// <summary>Report times, increasing, the first one 0.</summary>
    public IReadOnlyList<double> ReportTimes { get; }

    /// <summary>Number of steps that lead to report <paramref name="report"/> from the one before; 0 for the first.</summary>
    public int StepsBefore(int report) => stepCounts[report];

    /// <summary>Length of the steps that lead to report <paramref name="report"/> (≥ 1).</summary>
    public double StepLengthBefore(int report)
    {
        var even = (ReportTimes[report] - ReportTimes[report - 1]) / stepCounts[report];
        return Math.Abs(even - Step) <= 1e-9 * Step ? Step : even;
    }

    /// <summary>Number of steps from 0 to the last report.</summary>
    public long TotalSteps
    {
        get
        {
            var total = 0L;
            foreach (var count in stepCounts)
                total += count;
            return total;
        }
    }

    /// <summary>Whether every step is exactly the one asked for.</summary>
    public bool IsUniform
    {
        get
        {
            for (var i = 1; i < stepCounts.Length; i++)
            {
                if (StepLengthBefore(i) != Step)
                    return false;
            }

            return true;
        }
    }
}
