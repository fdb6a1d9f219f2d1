using FlowSolver.Problems;

namespace FlowSolver.Tests.Support;

/// <summary>A potential on the line from a function; slope and curvature by central differences of step 1e-4 where they are not given.</summary>
public sealed class LinePotentialOf(Func<double, double> height, Func<double, double>? slope = null, IReadOnlyList<Kink>? kinks = null) : Potential
{
    public override int Dimension => 1;

    public override string Description => "test landscape";

    public override bool IsSmooth => kinks is null;

    public override IReadOnlyList<Kink> FindKinks(Interval interval) => kinks ?? [];

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        for (var i = 0; i < x.Length; i++)
            value[i] = height(x[i]);
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        for (var i = 0; i < x.Length; i++)
            gradientX[i] = Slope(x[i]);
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        for (var i = 0; i < x.Length; i++)
            (target.Value[i], target.GradientX[i], target.HessianXX[i]) = (height(x[i]), Slope(x[i]), (Slope(x[i] + 1e-4) - Slope(x[i] - 1e-4)) / 2e-4);
    }

    private double Slope(double x) => slope is not null ? slope(x) : (height(x + 1e-4) - height(x - 1e-4)) / 2e-4;
}
