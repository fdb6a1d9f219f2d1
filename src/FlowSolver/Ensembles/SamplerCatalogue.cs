namespace FlowSolver.Ensembles;

/// <summary>What a case can say about its samplers; the rest has no options.</summary>
public sealed record SamplerOptions
{
    /// <summary>Constant error of the gradient on the x axis, for <c>ula-noisy-gradient</c>; energy per length.</summary>
    public double GradientBiasX { get; init; }

    /// <summary>Constant error of the gradient on the y axis; not used in one dimension.</summary>
    public double GradientBiasY { get; init; }

    /// <summary>Variance of the gradient's error on each axis; (energy per length)², not below 0.</summary>
    public double GradientVariance { get; init; } = 1;

    /// <summary>n₀ of <c>ula-decreasing</c>: steps before the parts begin to shrink; above 0.</summary>
    public double StepsBeforeDecrease { get; init; } = 10;

    /// <summary>α of <c>ula-decreasing</c>: steps shrink like n^(−α); above 0 and at most 1.</summary>
    public double DecreaseExponent { get; init; } = 0.5;
}

/// <summary>Every sampler by its name in a case file. One row a sampler.</summary>
public static class SamplerCatalogue
{
    private static readonly Func<SamplerOptions, Sampler>[] Rows =
    [
        _ => new UnadjustedLangevin(),
        _ => new ProximalLangevin(),
        _ => new ImplicitLangevin(),
        _ => new TrapezoidLangevin(),
        _ => new StrangLangevin(),
        _ => new LeimkuhlerMatthews(),
        _ => new MetropolisLangevin(),
        _ => new ProximalMetropolisLangevin(),
        options => new DecreasingStepLangevin(options.StepsBeforeDecrease, options.DecreaseExponent),
        options => new NoisyGradientLangevin(options.GradientBiasX, options.GradientBiasY, options.GradientVariance),
    ];

    private static readonly Sampler[] Plain = [.. Rows.Select(row => row(new SamplerOptions()))];

    /// <summary>All samplers with default options, in the order in which tables and figures show them.</summary>
    public static IReadOnlyList<Sampler> All => Plain;

    /// <summary>Finds a sampler with default options; null when there is none of that name.</summary>
    public static Sampler? Find(string name) => Array.Find(Plain, row => row.Traits.Name == name);

    /// <summary>Finds a sampler with options; null when there is none of that name.</summary>
    /// <exception cref="ArgumentException">An option is out of range.</exception>
    public static Sampler? Find(string name, SamplerOptions options)
    {
        var place = Array.FindIndex(Plain, row => row.Traits.Name == name);
        return place < 0 ? null : Rows[place](options);
    }
}
