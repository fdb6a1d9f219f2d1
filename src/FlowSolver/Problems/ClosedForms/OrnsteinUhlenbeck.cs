using FlowSolver.Foundation;

namespace FlowSolver.Problems.ClosedForms;

/// <summary>The quadratic well V = λx²/2 from a normal density: normal at all times.</summary>
/// <remarks>
/// Mean m₀e^(−λt), variance v₀e^(−2λt) + (T/λ)(1 − e^(−2λt)) (C. Gardiner, Handbook of Stochastic Methods; H. Risken, The Fokker-Planck Equation,
/// 2nd ed. 1989, chapter 5).
/// </remarks>
public sealed class OrnsteinUhlenbeck : ClosedForm
{
    private readonly double startMean;
    private readonly double startVariance;

    /// <summary>States the problem.</summary>
    /// <param name="stiffness">λ, above 0: energy per length².</param>
    /// <param name="temperature">T, above 0.</param>
    /// <param name="startMean">m₀.</param>
    /// <param name="startVariance">v₀, not below 0; 0 is a point.</param>
    public OrnsteinUhlenbeck(double stiffness, double temperature, double startMean, double startVariance)
    {
        Stiffness = Require.Positive(stiffness);
        Temperature = Require.Positive(temperature);
        this.startMean = Require.Finite(startMean);
        this.startVariance = Require.NotNegative(startVariance);
        Potential = new Well(stiffness);
    }

    /// <summary>λ.</summary>
    public double Stiffness { get; }

    /// <inheritdoc/>
    public override double Temperature { get; }

    /// <inheritdoc/>
    public override Potential Potential { get; }

    /// <inheritdoc/>
    public override string Source => "Gardiner, Handbook of Stochastic Methods; Risken, The Fokker-Planck Equation, 1989";

    /// <summary>Mean at a time.</summary>
    public double Mean(double time) => startMean * Math.Exp(-Stiffness * time);

    /// <summary>Variance at a time.</summary>
    public double Variance(double time)
    {
        var decay = Math.Exp(-2 * Stiffness * time);
        return startVariance * decay + Temperature / Stiffness * (1 - decay);
    }

    /// <summary>F = λ(v + m²)/2 − (T/2) log(2πe·v) at a time.</summary>
    public double FreeEnergy(double time)
    {
        var (m, v) = (Mean(time), Variance(time));
        return 0.5 * Stiffness * (v + m * m) - 0.5 * Temperature * Math.Log(2 * Math.PI * Math.E * v);
    }

    /// <summary>KL(ρ|π) = ½(λv/T − 1 − log(λv/T) + λm²/T) at a time.</summary>
    public double RelativeEntropy(double time)
    {
        var (m, v) = (Mean(time), Variance(time));
        var ratio = Stiffness * v / Temperature;
        return 0.5 * (ratio - 1 - Math.Log(ratio) + Stiffness * m * m / Temperature);
    }

    /// <summary>∫ρ|∇log(ρ/π)|² = λ²m²/T² + (λ√v/T − 1/√v)² at a time, so that dF/dt = −T² times it.</summary>
    public double FisherInformation(double time)
    {
        var (m, v) = (Mean(time), Variance(time));
        var spread = Stiffness * Math.Sqrt(v) / Temperature - 1 / Math.Sqrt(v);
        return Stiffness * Stiffness * m * m / (Temperature * Temperature) + spread * spread;
    }

    /// <inheritdoc/>
    public override Interval Support(double until)
    {
        var reach = 9 * Math.Sqrt(Math.Max(startVariance, Temperature / Stiffness));
        return new Interval(Math.Min(startMean, 0) - reach, Math.Max(startMean, 0) + reach);
    }

    /// <inheritdoc/>
    public override void Density(double time, ReadOnlySpan<double> x, Span<double> density)
    {
        Require.NotNegative(time);
        Require.Length(density.Length, x.Length);
        var (mean, variance) = (Mean(time), Require.Positive(Variance(time)));
        for (var i = 0; i < x.Length; i++)
            density[i] = Math.Exp(-(x[i] - mean) * (x[i] - mean) / (2 * variance)) / Math.Sqrt(2 * Math.PI * variance);
    }

    private sealed class Well(double stiffness) : LinePotential
    {
        public override string Description => FormattableString.Invariant($"{stiffness / 2}*x^2");

        public override PotentialForm Form => new QuadraticForm(0, 0, 0, stiffness, 0, 0);

        protected override (double Value, double Slope, double Curvature) At(double x) => (0.5 * stiffness * x * x, stiffness * x, stiffness);
    }
}
