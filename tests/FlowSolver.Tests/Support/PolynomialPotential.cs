using FlowSolver.Problems;

namespace FlowSolver.Tests.Support;

/// <summary>V = Σ c_k x^k written out by hand: an outside opinion beside the formula compiler, and a landscape for tests of the lower rooms.</summary>
public sealed class PolynomialPotential(params double[] coefficients) : Potential
{
    public override int Dimension => 1;

    public override string Description => "polynomial";

    public override PotentialForm? Form => coefficients.Length <= 3
        ? new QuadraticForm(At(0), At(1), 0, 2 * At(2), 0, 0)
        : null;

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        for (var i = 0; i < x.Length; i++)
            value[i] = Horner(x[i], 0);
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        for (var i = 0; i < x.Length; i++)
            gradientX[i] = Horner(x[i], 1);
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        for (var i = 0; i < x.Length; i++)
        {
            var p = x[i];
            (target.Value[i], target.GradientX[i], target.HessianXX[i]) = (Horner(p, 0), Horner(p, 1), Horner(p, 2));
        }
    }

    private double At(int power) => power < coefficients.Length ? coefficients[power] : 0;

    private double Horner(double x, int derivative)
    {
        var sum = 0.0;
        for (var k = coefficients.Length - 1; k >= derivative; k--)
        {
            var factor = 1.0;
            for (var d = 0; d < derivative; d++)
                factor *= k - d;
            sum = sum * x + factor * coefficients[k];
        }

        return sum;
    }
}

/// <summary>V = ½(qxx x² + 2 qxy xy + qyy y²) + (x⁴ + y⁴)·quartic/4 in two dimensions, written out by hand.</summary>
public sealed class PlanePotential(double qxx, double qxy, double qyy, double quartic = 0) : Potential
{
    public override int Dimension => 2;

    public override string Description => "quadratic plus quartic";

    public override PotentialForm? Form => quartic == 0 ? new QuadraticForm(0, 0, 0, qxx, qxy, qyy) : null;

    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        for (var i = 0; i < x.Length; i++)
        {
            var (a, b) = (x[i], y[i]);
            value[i] = 0.5 * (qxx * a * a + 2 * qxy * a * b + qyy * b * b) + quartic / 4 * (a * a * a * a + b * b * b * b);
        }
    }

    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        for (var i = 0; i < x.Length; i++)
        {
            var (a, b) = (x[i], y[i]);
            gradientX[i] = qxx * a + qxy * b + quartic * a * a * a;
            gradientY[i] = qxy * a + qyy * b + quartic * b * b * b;
        }
    }

    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        Value(x, y, target.Value);
        Gradient(x, y, target.GradientX, target.GradientY);
        for (var i = 0; i < x.Length; i++)
        {
            target.HessianXX[i] = qxx + 3 * quartic * x[i] * x[i];
            target.HessianXY[i] = qxy;
            target.HessianYY[i] = qyy + 3 * quartic * y[i] * y[i];
        }
    }
}
