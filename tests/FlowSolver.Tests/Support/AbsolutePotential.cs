using FlowSolver.Problems;

namespace FlowSolver.Tests.Support;

/// <summary>V = slope·|x|, written out by hand.</summary>
public sealed class AbsolutePotential(double slope) : Potential
{
    public override int Dimension => 1;

    public override string Description => "absolute value";

    public override PotentialForm? Form => new AbsoluteValueForm(0, slope, 0);

    public override bool IsSmooth => false;

    public override IReadOnlyList<Kink> FindKinks(Interval interval) => interval.Contains(0) ? [new Kink(0, -slope, slope, 0)] : [];

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        for (var i = 0; i < x.Length; i++)
            value[i] = slope * Math.Abs(x[i]);
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        for (var i = 0; i < x.Length; i++)
            gradientX[i] = slope * Math.Sign(x[i]);
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        Value(x, y, target.Value);
        Gradient(x, y, target.GradientX, []);
        target.HessianXX[..x.Length].Clear();
    }
}
