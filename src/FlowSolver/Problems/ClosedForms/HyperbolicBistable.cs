using FlowSolver.Foundation;
using SpecialFunctions = MathNet.Numerics.SpecialFunctions;

namespace FlowSolver.Problems.ClosedForms;

/// <summary>
/// The smooth potential V = ζ cosh 2x − 2 log cosh x at T = 1, bistable for ζ &lt; ½, whose slowest mode is known: rate 4ζ, shape tanh x relative to
/// equilibrium.
/// </summary>
/// <remarks>
/// With |c| ≤ 1, ρ(x, t) = π(x)(1 + c e^(−4ζt) tanh x) is positive and solves the equation; π = cosh²x e^(−ζ cosh 2x)/Z,
/// Z = (K₀(ζ) + K₁(ζ))/2. The potential is the supersymmetric partner of the hyperbolic double well of M. Razavy, Am. J. Phys. 48 (1980) 285
/// (from memory); the solution was derived for this project and is checked by substitution.
/// </remarks>
public sealed class HyperbolicBistable : ClosedForm
{
    private readonly double amplitude;
    private readonly double partition;

    /// <summary>States the problem.</summary>
    /// <param name="zeta">ζ, above 0.</param>
    /// <param name="amplitude">c, from −1 to 1.</param>
    public HyperbolicBistable(double zeta, double amplitude)
    {
        Zeta = Require.Positive(zeta);
        Require.That(Math.Abs(amplitude) <= 1, $"amplitude was {amplitude}; it must be from -1 to 1.");
        this.amplitude = amplitude;
        partition = 0.5 * (SpecialFunctions.BesselK0(zeta) + SpecialFunctions.BesselK1(zeta));
        Potential = new Wells(zeta);
    }

    /// <summary>ζ.</summary>
    public double Zeta { get; }

    /// <summary>The rate 4ζ of the slowest mode.</summary>
    public double SlowestRate => 4 * Zeta;

    /// <inheritdoc/>
    public override double Temperature => 1;

    /// <inheritdoc/>
    public override Potential Potential { get; }

    /// <inheritdoc/>
    public override string Source => "Razavy, Am. J. Phys. 48 (1980) 285, transcribed";

    /// <inheritdoc/>
    public override Interval Support(double until)
    {
        // V grows like ζe^(2x)/2: 45 temperatures above its least value.
        var reach = 1.0;
        while (Zeta * Math.Cosh(2 * reach) - 2 * Math.Log(Math.Cosh(reach)) < 45 + Zeta)
            reach += 0.05;
        return new Interval(-reach, reach);
    }

    /// <inheritdoc/>
    public override void Density(double time, ReadOnlySpan<double> x, Span<double> density)
    {
        Require.NotNegative(time);
        Require.Length(density.Length, x.Length);
        var decayed = amplitude * Math.Exp(-SlowestRate * time);
        for (var i = 0; i < x.Length; i++)
        {
            var cosh = Math.Cosh(x[i]);
            density[i] = cosh * cosh * Math.Exp(-Zeta * Math.Cosh(2 * x[i])) / partition * (1 + decayed * Math.Tanh(x[i]));
        }
    }

    private sealed class Wells(double zeta) : LinePotential
    {
        public override string Description => FormattableString.Invariant($"{zeta}*cosh(2*x) - 2*log(cosh(x))");

        protected override (double Value, double Slope, double Curvature) At(double x)
        {
            var tanh = Math.Tanh(x);
            // log cosh x without overflow.
            var logCosh = Math.Abs(x) + Math.Log(0.5 * (1 + Math.Exp(-2 * Math.Abs(x))));
            return (zeta * Math.Cosh(2 * x) - 2 * logCosh, 2 * zeta * Math.Sinh(2 * x) - 2 * tanh, 4 * zeta * Math.Cosh(2 * x) - 2 * (1 - tanh * tanh));
        }
    }
}
