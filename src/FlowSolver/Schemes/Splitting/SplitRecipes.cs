namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// The arrangements of transport and noise that have names. Each is a scheme for the density and, walker by walker, a sampler; the order of their stationary
/// error and its constant on a quadratic landscape stand with <see cref="SplittingScheme"/>.
/// </summary>
public static class SplitRecipes
{
    /// <summary>x − τ∇V(x), then noise: the unadjusted Langevin algorithm.</summary>
    public static SplitRecipe GradientThenNoise { get; } = new(SplitPart.Transport(TransportMap.Gradient), SplitPart.Noise());

    /// <summary>prox of τV, then noise: the proximal unadjusted Langevin algorithm.</summary>
    public static SplitRecipe ProximalThenNoise { get; } = new(SplitPart.Transport(TransportMap.Proximal), SplitPart.Noise());

    /// <summary>Noise, then prox of τV: the implicit Euler step.</summary>
    public static SplitRecipe NoiseThenProximal { get; } = new(SplitPart.Noise(), SplitPart.Transport(TransportMap.Proximal));

    /// <summary>Half an explicit step, noise, half a proximal step: second order.</summary>
    public static SplitRecipe HalfGradientNoiseHalfProximal { get; } = new(
        SplitPart.Transport(TransportMap.Gradient, 0.5), SplitPart.Noise(), SplitPart.Transport(TransportMap.Proximal, 0.5));

    /// <summary>Half a proximal step, noise, half an explicit step: second order.</summary>
    public static SplitRecipe HalfProximalNoiseHalfGradient { get; } = new(
        SplitPart.Transport(TransportMap.Proximal, 0.5), SplitPart.Noise(), SplitPart.Transport(TransportMap.Gradient, 0.5));

    /// <summary>Half the noise, the flow of −∇V for τ, half the noise: second order.</summary>
    public static SplitRecipe HalfNoiseFlowHalfNoise { get; } = new(
        SplitPart.Noise(0.5), SplitPart.Transport(TransportMap.Characteristic), SplitPart.Noise(0.5));

    /// <summary>Half the flow of −∇V, noise, half the flow: second order.</summary>
    public static SplitRecipe HalfFlowNoiseHalfFlow { get; } = new(
        SplitPart.Transport(TransportMap.Characteristic, 0.5), SplitPart.Noise(), SplitPart.Transport(TransportMap.Characteristic, 0.5));

    /// <summary>The flow of −∇V for τ, then noise.</summary>
    public static SplitRecipe FlowThenNoise { get; } = new(SplitPart.Transport(TransportMap.Characteristic), SplitPart.Noise());

    /// <summary>Noise, then the flow of −∇V for τ.</summary>
    public static SplitRecipe NoiseThenFlow { get; } = new(SplitPart.Noise(), SplitPart.Transport(TransportMap.Characteristic));

    /// <summary>Half the noise, prox of τV, half the noise; symmetric and yet first order, for a proximal step is not its own inverse backwards.</summary>
    public static SplitRecipe HalfNoiseProximalHalfNoise { get; } = new(
        SplitPart.Noise(0.5), SplitPart.Transport(TransportMap.Proximal), SplitPart.Noise(0.5));

    /// <summary>Half a proximal step, noise, half a proximal step; first order for the same reason.</summary>
    public static SplitRecipe HalfProximalNoiseHalfProximal { get; } = new(
        SplitPart.Transport(TransportMap.Proximal, 0.5), SplitPart.Noise(), SplitPart.Transport(TransportMap.Proximal, 0.5));
}
