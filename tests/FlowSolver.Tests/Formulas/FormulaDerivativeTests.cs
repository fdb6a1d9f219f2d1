using CsCheck;
using FlowSolver.Formulas;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Formulas;

/// <summary>
/// Exact derivatives, from text to compiled loop. Mutation tried: in the rule for quotients, da − q·db turned into da + q·db; both tests on random
/// formulas failed. Mutation tried: sinh for cosh in the derivative of sinh; the same tests and the central differences failed.
/// </summary>
public class FormulaDerivativeTests
{
    private static readonly double[] Xs = [-2.3, -0.9, -0.35, 0.17, 0.6, 1.1, 1.9, 3.7];
    private static readonly double[] Ys = [0.4, -1.7, 2.1, 0.05, -0.6, 1.3, -0.2, -2.9];

    [Fact]
    public void Jet_RandomFormulaOfTwoVariables_AgreesWithJetsCarriedForward()
    {
        var compared = 0;
        RandomFormula.Any.Sample(formula =>
        {
            var potential = FormulaPotential.Parse(formula.Text, 2, RandomFormula.Constants);
            Interlocked.Add(ref compared, Compare(formula, potential));
        }, iter: 150);
        Assert.True(compared > 1500, $"Only {compared} numbers could be compared.");
    }

    private static int Compare(RandomFormula formula, FormulaPotential potential)
    {
        var n = Xs.Length;
        var found = new double[6][];
        for (var c = 0; c < 6; c++)
            found[c] = new double[n];
        potential.Jet(Xs, Ys, new PotentialJet
        {
            Value = found[0],
            GradientX = found[1],
            GradientY = found[2],
            HessianXX = found[3],
            HessianXY = found[4],
            HessianYY = found[5],
        });
        var (value, gradientX, gradientY) = (new double[n], new double[n], new double[n]);
        potential.Value(Xs, Ys, value);
        potential.Gradient(Xs, Ys, gradientX, gradientY);
        var compared = 0;
        for (var i = 0; i < n; i++)
        {
            var jet = formula.Evaluate(Xs[i], Ys[i]);
            if (jet.IsDoubtful)
                continue;
            for (var c = 0; c < 6; c++)
            {
                var tolerance = 2e-12 * jet.Size(c) + 1e-300;
                Assert.True(Math.Abs(found[c][i] - jet[c]) <= tolerance,
                    $"{formula.Text}\ncomponent {c} at ({Xs[i]}, {Ys[i]}): {found[c][i]:r} instead of {jet[c]:r}, size {jet.Size(c):g3}");
                compared++;
            }

            // The three kernels are compiled apart; they may differ by rounding only.
            Assert.Equal(found[0][i], value[i], 1e-13 * jet.Size(0));
            Assert.Equal(found[1][i], gradientX[i], 1e-13 * jet.Size(1));
            Assert.Equal(found[2][i], gradientY[i], 1e-13 * jet.Size(2));
        }

        return compared;
    }

    [Fact]
    public void Jet_RandomFormulaOfOneVariable_AgreesWithJetsCarriedForward()
    {
        RandomFormula.OfX.Sample(formula =>
        {
            var potential = FormulaPotential.Parse(formula.Text, 1, RandomFormula.Constants);
            var (value, slope, curvature) = (new double[Xs.Length], new double[Xs.Length], new double[Xs.Length]);
            potential.Jet(Xs, [], new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature });
            for (var i = 0; i < Xs.Length; i++)
            {
                var jet = formula.Evaluate(Xs[i], 0);
                if (jet.IsDoubtful)
                    continue;
                Assert.True(Math.Abs(value[i] - jet[0]) <= 2e-12 * jet.Size(0) + 1e-300, $"{formula.Text} at {Xs[i]}: {value[i]:r}, {jet[0]:r}");
                Assert.True(Math.Abs(slope[i] - jet[1]) <= 2e-12 * jet.Size(1) + 1e-300, $"({formula.Text})' at {Xs[i]}: {slope[i]:r}, {jet[1]:r}");
                Assert.True(Math.Abs(curvature[i] - jet[3]) <= 2e-12 * jet.Size(3) + 1e-300, $"({formula.Text})'' at {Xs[i]}: {curvature[i]:r}, {jet[3]:r}");
            }
        }, iter: 150);
    }

    /// <summary>Against values alone, for formulas of the kind that people write.</summary>
    [Theory]
    [InlineData("(x^2-1)^2 + 2*(y-x/2)^2")]
    [InlineData("0.25*x^4 - 0.5*x^2 + 0.3*x*y + y^2/2")]
    [InlineData("-log(exp(-((x-1)^2+y^2)/0.5) + exp(-((x+1)^2+y^2)/0.8))")]
    [InlineData("(1-exp(-0.7*(x+1)))^2 + cosh(y)/4")]
    [InlineData("tanh(3*x)*y + erf(y-x)")]
    [InlineData("atan(x*y) + sin(2*x)*cos(y) + tan(x/5)")]
    [InlineData("abs(x-5)*y^2 + max(x, -9)*min(y, 8)")]
    [InlineData("sqrt(x^2+y^2+1)^3 + 2^x + (1+x^2)^y")]
    [InlineData("x^-2 + (x^2+1)^-0.5 + e^(-y^2) + pi*x")]
    public void Jet_CommonFormulas_AgreeWithCentralDifferences(string text)
    {
        var potential = FormulaPotential.Parse(text, 2);
        double[] xs = [0.71, -1.32, 0.23];
        double[] ys = [0.44, -0.61, 1.52];
        var (value, gx, gy, xx, xy, yy) = (new double[3], new double[3], new double[3], new double[3], new double[3], new double[3]);
        potential.Jet(xs, ys, new PotentialJet { Value = value, GradientX = gx, GradientY = gy, HessianXX = xx, HessianXY = xy, HessianYY = yy });
        // h = 1e-3 with fourth-order differences: truncation and rounding both near 1e-10 for these.
        const double h = 1e-3;
        for (var i = 0; i < xs.Length; i++)
        {
            var (x, y) = (xs[i], ys[i]);
            double First(Func<double, double> f) => (8 * (f(h) - f(-h)) - (f(2 * h) - f(-2 * h))) / (12 * h);
            double Second(Func<double, double> f) => (16 * (f(h) + f(-h)) - (f(2 * h) + f(-2 * h)) - 30 * f(0)) / (12 * h * h);
            Assert.Equal(First(d => potential.ValueAt(x + d, y)), gx[i], 1e-8 * (1 + Math.Abs(gx[i])));
            Assert.Equal(First(d => potential.ValueAt(x, y + d)), gy[i], 1e-8 * (1 + Math.Abs(gy[i])));
            Assert.Equal(Second(d => potential.ValueAt(x + d, y)), xx[i], 3e-7 * (1 + Math.Abs(xx[i])));
            Assert.Equal(Second(d => potential.ValueAt(x, y + d)), yy[i], 3e-7 * (1 + Math.Abs(yy[i])));
            Assert.Equal(First(d => First(c => potential.ValueAt(x + c, y + d))), xy[i], 3e-7 * (1 + Math.Abs(xy[i])));
        }
    }

    [Theory]
    [InlineData("1 + 2*x - 3*x^2 + 0.5*x^3 + 0.25*x^4", new[] { 1, 2, -3, 0.5, 0.25 })]
    [InlineData("(x^2-1)^2", new[] { 1.0, 0, -2, 0, 1 })]
    [InlineData("x*(x*(x*(x*(x - 1) + 2) - 3) + 4)", new[] { 0.0, 4, -3, 2, -1, 1 })]
    [InlineData("-x^6/6", new[] { 0.0, 0, 0, 0, 0, 0, -1.0 / 6 })]
    public void Jet_Polynomial_AgreesWithTheOneWrittenByHand(string text, double[] coefficients)
    {
        var byHand = new PolynomialPotential(coefficients);
        var parsed = FormulaPotential.Parse(text, 1);
        var x = new double[37];
        for (var i = 0; i < x.Length; i++)
            x[i] = -2.1 + 0.117 * i;
        var (v, g, h) = (new double[x.Length], new double[x.Length], new double[x.Length]);
        var (v2, g2, h2) = (new double[x.Length], new double[x.Length], new double[x.Length]);
        byHand.Jet(x, [], new PotentialJet { Value = v, GradientX = g, HessianXX = h });
        parsed.Jet(x, [], new PotentialJet { Value = v2, GradientX = g2, HessianXX = h2 });
        for (var i = 0; i < x.Length; i++)
        {
            Assert.Equal(v[i], v2[i], 3e-13);
            Assert.Equal(g[i], g2[i], 1e-12);
            Assert.Equal(h[i], h2[i], 4e-12);
        }
    }

    [Fact]
    public void Jet_PlaneWrittenByHand_Agrees()
    {
        var byHand = new PlanePotential(-0.5, 0.3, 1, 0.5);
        var parsed = FormulaPotential.Parse("(-0.5*x^2 + 2*0.3*x*y + y^2)/2 + (x^4 + y^4)/8", 2);
        var (a, b) = (new double[6][], new double[6][]);
        for (var c = 0; c < 6; c++)
            (a[c], b[c]) = (new double[Xs.Length], new double[Xs.Length]);
        byHand.Jet(Xs, Ys, Targets(a));
        parsed.Jet(Xs, Ys, Targets(b));
        for (var c = 0; c < 6; c++)
        {
            for (var i = 0; i < Xs.Length; i++)
                Assert.Equal(a[c][i], b[c][i], 1e-13 * (1 + Math.Abs(a[c][i])));
        }
    }

    private static PotentialJet Targets(double[][] t) => new()
    {
        Value = t[0],
        GradientX = t[1],
        GradientY = t[2],
        HessianXX = t[3],
        HessianXY = t[4],
        HessianYY = t[5],
    };

    [Fact]
    public void Derivative_AsFormula_CanBeEvaluatedAndDifferentiatedAgain()
    {
        var formula = Formula.Parse("x^3*y", 2);
        var dx = formula.Derivative(FormulaVariable.X);
        var dxy = dx.Derivative(FormulaVariable.Y);
        Assert.Equal(3 * 4 * 5, dx.ValueAt(2, 5));
        Assert.Equal(12, dxy.ValueAt(2, 5));
        Assert.Equal(0, dxy.Derivative(FormulaVariable.Y).AsConstant());
    }

    /// <summary>Far out, where 1 − tanh² has no digit left.</summary>
    [Fact]
    public void Gradient_TanhFarOut_KeepsItsDigits()
    {
        var potential = FormulaPotential.Parse("tanh(x)", 1);
        var slope = new double[1];
        potential.Gradient([30.0], [], slope, []);
        var exact = 4 * Math.Exp(-60);
        Assert.Equal(exact, slope[0], 1e-14 * exact);
    }
}
