using CsCheck;
using FlowSolver.Formulas;

namespace FlowSolver.Tests.Formulas;

/// <summary>
/// Recognised structure. Mutation tried: coefficients that cancel compared with exactly 0; (x+0.1)³x − x⁴ − 0.3x³ was no longer
/// seen as quadratic and the test failed. Mutation tried: the sign of the left branch taken from the right; no |x| was recognised any more.
/// </summary>
public class FormulaStructureTests
{
    [Theory]
    [InlineData("3", 3, 0, 0)]
    [InlineData("x - x", 0, 0, 0)]
    [InlineData("2*x + 1", 1, 2, 0)]
    [InlineData("x^2/2", 0, 0, 1)]
    [InlineData("(x-1)^2", 1, -2, 2)]
    [InlineData("3*(x-1)*(x+2)", -6, 3, 6)]
    [InlineData("(x+1)^3 - x^3 - 1", 0, 3, 6)]
    [InlineData("(x+0.1)^3 - x^3", 0.001, 0.03, 0.6)]
    [InlineData("(x^2-1)^2 - x^4", 1, 0, -4)]
    [InlineData("0.1*x^3 + 0.2*x^3 - 0.3*x^3 + x^2", 0, 0, 2)]
    [InlineData("(x+0.1)^3*x - x^4 - 0.3*x^3", 0, 0.001, 0.06)]
    [InlineData("abs(x)*abs(x)", 0, 0, 2)]
    [InlineData("abs(x-1)^2 + sqrt(4)", 3, -2, 2)]
    [InlineData("x*x*k", 0, 0, 8)]
    [InlineData("log(exp(x))", 0, 1, 0)]
    [InlineData("sqrt(x^4)", 0, 0, 2)]
    public void AsQuadratic_OfOneVariable_FindsCoefficients(string text, double constant, double gradient, double hessian)
    {
        var formula = Formula.Parse(text, 1, new Dictionary<string, double> { ["k"] = 4 });
        var found = formula.AsQuadratic();
        Assert.NotNull(found);
        Assert.Equal(constant, found.Constant, 1e-14);
        Assert.Equal(gradient, found.GradientX, 1e-14);
        Assert.Equal(hessian, found.HessianXX, 1e-14);
        Assert.Equal(0, found.GradientY);
        Assert.Equal(gradient == 0 && hessian == 0 ? constant : null, formula.AsConstant());
    }

    [Fact]
    public void AsQuadratic_OfTwoVariables_FindsCoefficients()
    {
        var found = Formula.Parse("1 - 2*x + 3*y + 2*x^2 - 5*x*y + (y-1)^2", 2).AsQuadratic();
        Assert.Equal(new QuadraticStructure(2, -2, 1, 4, -5, 2), found);
    }

    [Theory]
    [InlineData("x^3")]
    [InlineData("x^2 + 1e-9*x^3")]
    [InlineData("abs(x)")]
    [InlineData("exp(x)")]
    [InlineData("1/x")]
    [InlineData("x^2 + max(x, 0)^2")]
    [InlineData("x^0.5")]
    [InlineData("sqrt(x^2+1)")]
    public void AsQuadratic_OfSomethingElse_IsNull(string text) => Assert.Null(Formula.Parse(text, 1).AsQuadratic());

    [Theory]
    [InlineData("abs(x)", 0, 1, 0)]
    [InlineData("2*abs(x - 0.5) + 3", 3, 2, 0.5)]
    [InlineData("3 + abs(2*x - 1)", 3, 2, 0.5)]
    [InlineData("abs(-x)", 0, 1, 0)]
    [InlineData("max(x, -x)", 0, 1, 0)]
    [InlineData("-min(x, -x)", 0, 1, 0)]
    [InlineData("max(2*x - 1, 3 - 2*x)", 1, 2, 1)]
    [InlineData("x*sign(x)", 0, 1, 0)]
    [InlineData("x*(2*step(x) - 1)", 0, 1, 0)]
    [InlineData("2*max(x, 0) - x", 0, 1, 0)]
    [InlineData("sqrt(x^2)", 0, 1, 0)]
    [InlineData("sqrt((x-2)^2) + 1", 1, 1, 2)]
    [InlineData("sqrt(x^2 - 2*x + 1)", 0, 1, 1)]
    [InlineData("(x^2)^0.5*4", 0, 4, 0)]
    [InlineData("sqrt(9*x^2)", 0, 3, 0)]
    [InlineData("3*abs(x) - abs(x)", 0, 2, 0)]
    [InlineData("abs(x) + abs(2*x)", 0, 3, 0)]
    [InlineData("abs(abs(x-1))", 0, 1, 1)]
    [InlineData("max(abs(x), -abs(x)) + 1", 1, 1, 0)]
    [InlineData("abs(x/4 - 0.5)*k", 0, 1, 2)]
    public void AsAbsoluteValue_HoweverWritten_FindsParameters(string text, double constant, double slope, double center)
    {
        var formula = Formula.Parse(text, 1, new Dictionary<string, double> { ["k"] = 4 });
        var found = formula.AsAbsoluteValue();
        Assert.NotNull(found);
        Assert.Equal(constant, found.Constant, 1e-14);
        Assert.Equal(slope, found.Slope, 1e-14);
        Assert.Equal(center, found.Center, 1e-14);
        Assert.Null(formula.AsQuadratic());
        foreach (var x in new[] { -3.1, -0.2, 0.4, 0.9, 1.3, 5.0 })
            Assert.Equal(formula.ValueAt(x), found.Constant + found.Slope * Math.Abs(x - found.Center), 1e-13);
    }

    [Theory]
    [InlineData("-abs(x)")]
    [InlineData("abs(x) + x")]
    [InlineData("abs(x) + abs(x-1)")]
    [InlineData("abs(x)^2")]
    [InlineData("abs(x)*x")]
    [InlineData("max(x, 0)")]
    [InlineData("abs(x) + step(x)")]
    [InlineData("abs(x^2 - 1)")]
    [InlineData("abs(sin(x))")]
    [InlineData("abs(3)")]
    [InlineData("x^2")]
    [InlineData("exp(abs(x))")]
    [InlineData("abs(x) + 0.001*x^2")]
    [InlineData("sqrt(x^2 + 1e-8)")]
    [InlineData("sign(x)")]
    public void AsAbsoluteValue_OfSomethingElse_IsNull(string text) => Assert.Null(Formula.Parse(text, 1).AsAbsoluteValue());

    /// <summary>Whatever is recognised must have the values of the formula.</summary>
    [Fact]
    public void Structure_RandomFormula_NeverChangesValues()
    {
        RandomFormula.OfX.Sample(random =>
        {
            var formula = Formula.Parse(random.Text, 1, RandomFormula.Constants);
            var (quadratic, absolute) = (formula.AsQuadratic(), formula.AsAbsoluteValue());
            foreach (var x in new[] { -2.2, -0.7, 0.3, 1.4 })
            {
                var jet = random.Evaluate(x, 0);
                if (jet.IsDoubtful)
                    continue;
                if (quadratic is not null)
                    Assert.Equal(jet[0], quadratic.Constant + x * (quadratic.GradientX + 0.5 * x * quadratic.HessianXX), 1e-11 * jet.Size(0));
                if (absolute is not null)
                    Assert.Equal(jet[0], absolute.Constant + absolute.Slope * Math.Abs(x - absolute.Center), 1e-11 * jet.Size(0));
            }
        }, iter: 3000);
    }

    [Theory]
    [InlineData("x^2", true)]
    [InlineData("abs(x)", false)]
    [InlineData("abs(x)^2", true)]
    [InlineData("abs(exp(x))", true)]
    [InlineData("max(x^2, 0)", true)]
    [InlineData("max(x, 0)", false)]
    [InlineData("step(x)", false)]
    [InlineData("sqrt(x^2)", false)]
    [InlineData("x*abs(x)", false)]
    public void IsSmooth_IsKnownFromTheFormula(string text, bool isSmooth) => Assert.Equal(isSmooth, Formula.Parse(text, 1).IsSmooth);
}
