using FlowSolver.Formulas;

namespace FlowSolver.Tests.Published;

/// <summary>
/// Values of the error function and relatives: M. Abramowitz, I. Stegun, Handbook of Mathematical Functions, NBS AMS 55 (1964), Table 7.1; normal
/// distribution Φ(x) = ½(1 + erf(x/√2)). Digits recomputed at 20 digits for facts.md E.1.
/// </summary>
public class FormulaSpecialValues
{
    [Theory]
    [InlineData("erf(x)", 0.1, 0.1124629160182849, 1e-16)]
    [InlineData("erf(x)", 0.5, 0.5204998778130465, 1.2e-16)]
    [InlineData("erf(x)", 1, 0.8427007929497149, 2.3e-16)]
    [InlineData("erf(x)", 1.5, 0.9661051464753107, 2.3e-16)]
    [InlineData("erf(x)", 2, 0.9953222650189527, 2.3e-16)]
    [InlineData("1 - erf(x)", 3, 2.209049699858544e-5, 1.2e-16)]
    [InlineData("1 - erf(x)", 5, 1.537459794428035e-12, 1.2e-16)]
    [InlineData("(1 + erf(x/sqrt(2)))/2", -1, 0.1586552539314571, 1.2e-16)]
    [InlineData("(1 + erf(x/sqrt(2)))/2", -2, 0.02275013194817921, 1.2e-16)]
    [InlineData("(1 + erf(x/sqrt(2)))/2", -3, 0.001349898031630095, 1.2e-16)]
    [InlineData("(1 + erf(x/sqrt(2)))/2", 1.959963984540054, 0.975, 2.3e-16)]
    public void Value_ErrorFunction_AgreesWithTheTable(string text, double x, double expected, double tolerance)
    {
        var value = new double[1];
        var formula = Formula.Parse(text, 1);
        formula.Value([x], [], value);
        Assert.Equal(expected, value[0], tolerance);
        Assert.Equal(expected, formula.ValueAt(x), 2 * tolerance);
    }
}
