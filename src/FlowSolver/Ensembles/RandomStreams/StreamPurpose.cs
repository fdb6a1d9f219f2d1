namespace FlowSolver.Ensembles.RandomStreams;

/// <summary>
/// The purposes that this library has given out, so that no two uses of one seed share numbers by accident. Samplers draw the same noise under
/// the same seed on purpose: two samplers then differ by their steps and not by their luck.
/// </summary>
public static class StreamPurpose
{
    /// <summary>Start draws: 1 … 15 (see <see cref="StartDraws"/>).</summary>
    public const uint Start = 1;

    /// <summary>Noise of a step: part p of a recipe on axis a (0 or 1) uses 16 + 2p + a.</summary>
    public const uint Noise = 16;

    /// <summary>Decisions of Metropolis-adjusted samplers.</summary>
    public const uint Acceptance = 64;

    /// <summary>Errors of a noisy gradient, axis a uses 65 + a.</summary>
    public const uint GradientError = 65;

    /// <summary>First purpose that is free for simulations such as noise floors; everything above is theirs.</summary>
    public const uint Simulation = 1024;
}
