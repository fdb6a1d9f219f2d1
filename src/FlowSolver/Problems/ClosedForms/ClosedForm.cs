using FlowSolver.Foundation;

namespace FlowSolver.Problems.ClosedForms;

/// <summary>
/// A drift-diffusion equation ∂ρ/∂t = ∂(ρV′ + T∂ρ/∂x)/∂x on the line (mobility 1) with a solution that is known in closed form. Immutable.
/// </summary>
public abstract class ClosedForm
{
    /// <summary>V.</summary>
    public abstract Potential Potential { get; }

    /// <summary>T, in units of energy.</summary>
    public abstract double Temperature { get; }

    /// <summary>Where the solution comes from.</summary>
    public abstract string Source { get; }

    /// <summary>An interval outside which the solution has less than about 1e-16 of its mass up to time <paramref name="until"/>, so that walls there change nothing.</summary>
    public abstract Interval Support(double until);

    /// <summary>Writes the density at a time.</summary>
    /// <param name="time">t, not below 0; above 0 where the start is a point.</param>
    /// <param name="x">Positions.</param>
    /// <param name="density">Receives the density; of the same length.</param>
    public abstract void Density(double time, ReadOnlySpan<double> x, Span<double> density);

    /// <summary>The density at one point.</summary>
    public double DensityAt(double time, double x)
    {
        Span<double> value = stackalloc double[1];
        Density(time, [x], value);
        return value[0];
    }

    /// <summary>The equation with the solution at <paramref name="time"/> as its start, on an interval.</summary>
    /// <param name="interval">The axis.</param>
    /// <param name="time">The solution's time that is to be time 0.</param>
    public Problem ProblemFrom(Interval interval, double time = 0)
    {
        void Start(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value) => Density(time, x, value);
        return new Problem(Potential, Temperature, new Domain(interval), new FunctionStart(Start, GetType().Name, Potential.IsSmooth), 1.0, GetType().Name);
    }
}

/// <summary>A potential on the line whose value, slope and curvature are given as functions of one number.</summary>
internal abstract class LinePotential : Potential
{
    public override int Dimension => 1;

    protected abstract (double Value, double Slope, double Curvature) At(double x);

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        Require.Length(value.Length, x.Length);
        for (var i = 0; i < x.Length; i++)
            value[i] = At(x[i]).Value;
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        Require.Length(gradientX.Length, x.Length);
        for (var i = 0; i < x.Length; i++)
            gradientX[i] = At(x[i]).Slope;
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        for (var i = 0; i < x.Length; i++)
            (target.Value[i], target.GradientX[i], target.HessianXX[i]) = At(x[i]);
    }
}
