using FlowSolver.Foundation;
using SpecialFunctions = MathNet.Numerics.SpecialFunctions;

namespace FlowSolver.Problems.ClosedForms;

/// <summary>The V-shaped well V = a|x| from a point y: the propagator of Brownian motion with dry friction.</summary>
/// <remarks>
/// p(x, t|y) = (4πTt)^(−½) exp(−a(|x| − |y|)/2T − a²t/4T − (x − y)²/4Tt) + (a/4T) e^(−a|x|/T) (1 + erf((at − |x| − |y|)/√(4Tt))).
/// T. Caughey, J. Dienes, J. Appl. Phys. 32 (1961) 2476; P.-G. de Gennes, J. Stat. Phys. 119 (2005) 953 (both from memory); H. Touchette,
/// E. Van der Straeten, W. Just, J. Phys. A 43 (2010) 445002.
/// </remarks>
public sealed class DryFriction : ClosedForm
{
    private readonly double slope;
    private readonly double from;

    /// <summary>States the problem.</summary>
    /// <param name="slope">a, above 0: energy per length.</param>
    /// <param name="temperature">T, above 0.</param>
    /// <param name="from">y, where all mass is at time 0.</param>
    public DryFriction(double slope, double temperature, double from)
    {
        this.slope = Require.Positive(slope);
        Temperature = Require.Positive(temperature);
        this.from = Require.Finite(from);
        Potential = new Wedge(slope);
    }

    /// <inheritdoc/>
    public override double Temperature { get; }

    /// <inheritdoc/>
    public override Potential Potential { get; }

    /// <inheritdoc/>
    public override string Source => "Touchette, Van der Straeten, Just, J. Phys. A 43 (2010) 445002";

    /// <inheritdoc/>
    public override Interval Support(double until)
    {
        var reach = Math.Max(37 * Temperature / slope, Math.Abs(from) + 9 * Math.Sqrt(2 * Temperature * until));
        return new Interval(-reach, reach);
    }

    /// <inheritdoc/>
    public override void Density(double time, ReadOnlySpan<double> x, Span<double> density)
    {
        Require.Positive(time);
        Require.Length(density.Length, x.Length);
        var (a, t4) = (slope, 4 * Temperature * time);
        for (var i = 0; i < x.Length; i++)
        {
            var (here, start) = (Math.Abs(x[i]), Math.Abs(from));
            var z = (a * time - here - start) / Math.Sqrt(t4);
            density[i] = Math.Exp(-a * (here - start) / (2 * Temperature) - a * a * time / (4 * Temperature) - (x[i] - from) * (x[i] - from) / t4)
                    / Math.Sqrt(Math.PI * t4)
                // 1 + erf z as erfc(−z), which keeps its digits where z is far below 0.
                + a / (4 * Temperature) * Math.Exp(-a * here / Temperature) * SpecialFunctions.Erfc(-z);
        }
    }

    private sealed class Wedge(double slope) : LinePotential
    {
        public override string Description => FormattableString.Invariant($"{slope}*abs(x)");

        public override PotentialForm Form => new AbsoluteValueForm(0, slope, 0);

        public override bool IsSmooth => false;

        public override IReadOnlyList<Kink> FindKinks(Interval interval)
            => interval.From < 0 && interval.To > 0 ? [new Kink(0, -slope, slope, 0)] : [];

        protected override (double Value, double Slope, double Curvature) At(double x) => (slope * Math.Abs(x), x < 0 ? -slope : slope, 0);
    }
}
