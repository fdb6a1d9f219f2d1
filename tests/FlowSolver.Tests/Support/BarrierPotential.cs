using FlowSolver.Problems;

namespace FlowSolver.Tests.Support;

/// <summary>V = height for |x| &lt; half width, 0 elsewhere; jumps known as jumps.</summary>
public sealed class BarrierPotential(double height, double halfWidth, double wall) : Potential
{
    public override int Dimension => 1;

    public override string Description => "rectangular barrier";

    public override bool IsSmooth => false;

    public override IReadOnlyList<Kink> FindKinks(Interval interval)
        => halfWidth < wall ? [new Kink(-halfWidth, 0, 0, height), new Kink(halfWidth, 0, 0, -height)] : [];

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        for (var i = 0; i < x.Length; i++)
            value[i] = Math.Abs(x[i]) < halfWidth ? height : 0;
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        => gradientX.Clear();

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        Value(x, y, target.Value);
        target.GradientX.Clear();
        target.HessianXX.Clear();
    }
}
