using FlowSolver.Problems;

namespace FlowSolver.Studies;

/// <summary>What can be seen in sample rows without a law.</summary>
internal static class SampleNotes
{
    public static IEnumerable<string> Of(AuditSamples set, Domain domain, bool isChain)
    {
        var n = set.X.Length;
        var outside = Outside(set.X, domain.X) + (domain.Y is { } y && set.Y is not null ? Outside(set.Y, y) : 0);
        if (outside > 0)
            yield return FormattableString.Invariant($"{outside} of {n} positions lie outside the walls of the domain.");
        var sorted = (double[])set.X.Clone();
        Array.Sort(sorted);
        var repeated = 0;
        for (var i = 1; i < n; i++)
            repeated += sorted[i] == sorted[i - 1] && (set.Y is null || domain.Dimension == 1) ? 1 : 0;
        var digits = Decimals(set.X);
        var isSingle = Array.TrueForAll(set.X, value => (double)(float)value == value);
        if (digits is { } places)
            yield return FormattableString.Invariant($"The positions are rounded to {places} decimal place{(places == 1 ? "" : "s")}.");
        else if (!isChain && !isSingle && repeated > 0.001 * n)
            yield return FormattableString.Invariant($"{repeated} of {n} positions are exact repeats of others: rows may have been written twice, or walkers copied.");
        if (isChain && n >= 1000 && BurnIn(set.X) is { } share)
            yield return FormattableString.Invariant($"The first {100 * share:f0} % of the chain lies apart from the rest: burn-in, to be cut off.");
        if (!isChain && n >= 1000 && AutocorrelationTime.Of(set.X) is { Time: > 1.5 } time && time.Time > 1 + 8 / Math.Sqrt(n) * time.Window)
            yield return FormattableString.Invariant($"Neighbouring rows are correlated (autocorrelation time {time.Time:g3} rows): if this is one chain, say so with --chain; the p-value here takes rows as independent.");
    }

    /// <summary>The slowest of a few observables: position, its square about the mean, and being below three quantiles.</summary>
    public static AutocorrelationTime Slowest(AuditSamples set)
    {
        var slowest = SlowestOf(set.X);
        if (set.Y is not null && SlowestOf(set.Y) is var other && other.Time > slowest.Time)
            slowest = other;
        return slowest;
    }

    private static AutocorrelationTime SlowestOf(double[] x)
    {
        var slowest = AutocorrelationTime.Of(x);
        var sorted = (double[])x.Clone();
        Array.Sort(sorted);
        var indicator = new double[x.Length];
        foreach (var share in new[] { 0.25, 0.5, 0.75 })
        {
            var border = sorted[(int)(share * (x.Length - 1))];
            for (var i = 0; i < x.Length; i++)
                indicator[i] = x[i] <= border ? 1 : 0;
            var found = AutocorrelationTime.Of(indicator);
            if (found.Time > slowest.Time && found.Window < x.Length - 1)
                slowest = found;
        }

        return slowest;
    }

    private static int Outside(double[] values, Interval interval)
        => interval.Ends == AxisEnds.Periodic ? 0 : values.Count(value => !interval.Contains(value));

    // The fewest decimals (up to 4) that hold every value, where values that many would be distinct by chance.
    private static int? Decimals(double[] values)
    {
        if (values.Length < 100)
            return null;
        var scale = 1.0;
        for (var places = 0; places <= 4; places++, scale *= 10)
        {
            var factor = scale;
            if (Array.TrueForAll(values, value => Math.Abs(value * factor - Math.Round(value * factor)) <= 1e-9 * Math.Max(1, Math.Abs(value * factor))))
                return places;
        }

        return null;
    }

    // Compares the first 2, 5, 10 and 20 % with the second half: a mean more than 8 standard errors away, counted with the autocorrelation of the half.
    private static double? BurnIn(double[] chain)
    {
        var half = chain.AsSpan(chain.Length / 2);
        var (mean, variance) = MeanAndVariance(half);
        var time = Math.Max(1, AutocorrelationTime.Of(half).Time);
        double? found = null;
        foreach (var share in new[] { 0.02, 0.05, 0.1, 0.2 })
        {
            var count = (int)(share * chain.Length);
            var (early, _) = MeanAndVariance(chain.AsSpan(0, count));
            if (Math.Abs(early - mean) > 8 * Math.Sqrt(variance * time * (1.0 / count + 2.0 / chain.Length)))
                found = share;
        }

        return found;
    }

    private static (double Mean, double Variance) MeanAndVariance(ReadOnlySpan<double> values)
    {
        var mean = Foundation.SpanKernels.Sum(values) / values.Length;
        var sum = 0.0;
        foreach (var value in values)
            sum += (value - mean) * (value - mean);
        return (mean, sum / Math.Max(1, values.Length - 1));
    }
}
