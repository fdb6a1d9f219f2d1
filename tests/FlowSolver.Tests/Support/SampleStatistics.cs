namespace FlowSolver.Tests.Support;

/// <summary>Statistics of samples for tests whose tolerance is a number of standard errors under a fixed seed.</summary>
public static class SampleStatistics
{
    public static double Mean(ReadOnlySpan<double> sample)
    {
        var sum = 0.0;
        foreach (var value in sample)
            sum += value;
        return sum / sample.Length;
    }

    public static double Variance(ReadOnlySpan<double> sample)
    {
        var mean = Mean(sample);
        var sum = 0.0;
        foreach (var value in sample)
            sum += (value - mean) * (value - mean);
        return sum / sample.Length;
    }

    /// <summary>Kolmogorov's statistic √N·sup|F_N − F|. Under the law its 99 % point is 1.63, its 99.9 % point 1.95 (limit law, tables).</summary>
    public static double Kolmogorov(ReadOnlySpan<double> sample, Func<double, double> cumulative)
    {
        var sorted = sample.ToArray();
        Array.Sort(sorted);
        var largest = 0.0;
        for (var i = 0; i < sorted.Length; i++)
        {
            var f = cumulative(sorted[i]);
            largest = Math.Max(largest, Math.Max((i + 1.0) / sorted.Length - f, f - (double)i / sorted.Length));
        }

        return largest * Math.Sqrt(sorted.Length);
    }

    /// <summary>Pearson's χ² of counts against probabilities, as a number of standard deviations above its mean: (χ² − k + 1)/√(2(k − 1)).</summary>
    public static double ChiSquareScore(ReadOnlySpan<int> counts, ReadOnlySpan<double> probabilities)
    {
        double total = 0, sum = 0;
        foreach (var count in counts)
            total += count;
        for (var i = 0; i < counts.Length; i++)
        {
            var expected = total * probabilities[i];
            sum += (counts[i] - expected) * (counts[i] - expected) / expected;
        }

        return (sum - (counts.Length - 1)) / Math.Sqrt(2.0 * (counts.Length - 1));
    }

    /// <summary>The cumulative distribution of an unnormalised density on an interval, by Simpson's rule on 20,000 parts.</summary>
    public static Func<double, double> Cumulative(Func<double, double> density, double from, double to)
    {
        const int parts = 20000;
        var width = (to - from) / parts;
        var table = new double[parts + 1];
        for (var i = 0; i < parts; i++)
        {
            var left = from + i * width;
            table[i + 1] = table[i] + width / 6 * (density(left) + 4 * density(left + 0.5 * width) + density(left + width));
        }

        return x =>
        {
            var place = Math.Clamp((x - from) / width, 0, parts);
            var cell = Math.Min((int)place, parts - 1);
            return (table[cell] + (place - cell) * (table[cell + 1] - table[cell])) / table[parts];
        };
    }
}
