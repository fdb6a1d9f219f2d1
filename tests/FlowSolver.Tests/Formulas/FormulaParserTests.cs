using CsCheck;
using FlowSolver.Formulas;
using FlowSolver.Foundation;

namespace FlowSolver.Tests.Formulas;

/// <summary>
/// Grammar and faults. Mutation tried: the exponent read by Atom() instead of Exponent(), so that ^ binds left; the precedence table failed.
/// Mutation tried: the caret one place to the left; the table of carets failed.
/// </summary>
public class FormulaParserTests
{
    [Theory]
    [InlineData("1 + 2*3", 7)]
    [InlineData("(1 + 2)*3", 9)]
    [InlineData("2*3^2", 18)]
    [InlineData("2^3^2", 512)]
    [InlineData("(2^3)^2", 64)]
    [InlineData("-3^2", -9)]
    [InlineData("(-3)^2", 9)]
    [InlineData("2^-1", 0.5)]
    [InlineData("2^-2^2", 0.0625)]
    [InlineData("-2^-2", -0.25)]
    [InlineData("10 - 4 - 3", 3)]
    [InlineData("24/4/3", 2)]
    [InlineData("24/4*3", 18)]
    [InlineData("2*-3", -6)]
    [InlineData("2--3", 5)]
    [InlineData("--3", 3)]
    [InlineData("1 - -2^2", 5)]
    [InlineData("-2*3", -6)]
    [InlineData("6/-2", -3)]
    [InlineData(".5 + 1.", 1.5)]
    [InlineData("1e3 + 2E-1 + 1.5e+2", 1150.2)]
    [InlineData("2*e", 2 * Math.E)]
    [InlineData("cos(pi)", -1)]
    [InlineData("min(3, 1 + 1) + max(-1, -2)", 1)]
    [InlineData("sign(-2) + step(0) + step(-1) + sign(0)", 0)]
    [InlineData("\t 1\n+\r\n 2 ", 3)]
    [InlineData("a*b_2", 3)]
    [InlineData("atan(1)*4", Math.PI)]
    [InlineData("0^0", 1)]
    public void Parse_ConstantFormula_HasValue(string text, double value)
    {
        var formula = Formula.Parse(text, 1, new Dictionary<string, double> { ["a"] = 1.5, ["b_2"] = 2 });
        Assert.Equal(value, formula.ValueAt(0.3), 1e-13);
        Assert.Equal(value, formula.AsConstant()!.Value, 1e-13);
    }

    /// <summary>Text, place of the caret (from 0), part of the sentence.</summary>
    [Theory]
    [InlineData("", 0, "empty")]
    [InlineData("   ", 0, "empty")]
    [InlineData("x +", 3, "ended early")]
    [InlineData("2x", 1, "operator was missing before x")]
    [InlineData("2 x", 2, "operator was missing before x")]
    [InlineData("(x)(x)", 3, "operator was missing before '('")]
    [InlineData("x 2", 2, "operator was missing before 2")]
    [InlineData("2pi", 1, "operator was missing before pi")]
    [InlineData("x(1)", 0, "x is not a function")]
    [InlineData("sin x", 0, "sin stood without parentheses")]
    [InlineData("x + sin", 4, "sin stood without parentheses")]
    [InlineData("sin()", 0, "sin was given 0 arguments")]
    [InlineData("min(x)", 0, "min was given 1 argument; it must have 2")]
    [InlineData("sin(x, 1)", 0, "sin was given 2 arguments; it must have 1")]
    [InlineData("max(1, 2, 3)", 0, "max was given 3 arguments")]
    [InlineData("(x + 1", 0, "never closed")]
    [InlineData("3*(x + (1)", 2, "never closed")]
    [InlineData("cos(x", 3, "parenthesis of cos")]
    [InlineData("x + 1)", 5, "closes nothing")]
    [InlineData("()", 1, "held nothing")]
    [InlineData("x**2", 1, "** was found")]
    [InlineData("*x", 0, "had nothing before it")]
    [InlineData("x*/2", 2, "had nothing before it")]
    [InlineData("+x", 0, "'+' had nothing before it")]
    [InlineData("1,5*x", 1, "comma may only stand")]
    [InlineData("1.2.3", 3, "two points")]
    [InlineData(".", 0, "point stood without digits")]
    [InlineData("2e", 1, "no digits")]
    [InlineData("2e+", 1, "no digits")]
    [InlineData("1e999", 0, "too large")]
    [InlineData("y + x", 0, "one dimension")]
    [InlineData("x + sni(x)", 4, "sni is not known")]
    [InlineData("q*x", 0, "q is not known")]
    [InlineData("x \u2212 1", 2, "was not understood")]
    [InlineData("x\u00b2", 1, "was not understood")]
    [InlineData("[x]", 0, "was not understood")]
    [InlineData("x = 2", 2, "was not understood")]
    [InlineData("x | 2", 2, "was not understood")]
    [InlineData("x\u0000", 1, "U+0000")]
    [InlineData("x + \ud83d\ude00", 4, "was not understood")]
    [InlineData("x \"2\"", 2, "was not understood")]
    public void Parse_Fault_HasCaretAndSentence(string text, int caret, string part)
    {
        var fault = Assert.Throws<InputException>(() => Formula.Parse(text, 1)).Faults.Single();
        Assert.Contains(part, fault.Message, StringComparison.Ordinal);
        Assert.EndsWith(".", fault.Message, StringComparison.Ordinal);
        var lines = fault.Detail!.Split('\n');
        Assert.Equal(2, lines.Length);
        Assert.Equal(text.Length, lines[0].Length);
        Assert.Equal(new string(' ', caret) + "^", lines[1]);
        Assert.Equal(caret + 1, fault.Column);
    }

    [Theory]
    [InlineData("sni(x)", "Did you mean sin?")]
    [InlineData("Exp(x)", "Did you mean exp?")]
    [InlineData("sqrt2(x)", "Did you mean sqrt?")]
    [InlineData("ln(x)", "Write log.")]
    [InlineData("heaviside(x)", "Write step.")]
    [InlineData("sigma*x", "Did you mean sigma_0?")]
    [InlineData("X", "Did you mean x?")]
    [InlineData("PI", "Did you mean pi?")]
    [InlineData("foo(x)", "The functions are exp, log,")]
    [InlineData("q", "The names are x, pi, e and the constants sigma_0, k.")]
    public void Parse_UnknownName_NamesTheNearest(string text, string remedy)
    {
        var constants = new Dictionary<string, double> { ["sigma_0"] = 1, ["k"] = 2 };
        var fault = Assert.Throws<InputException>(() => Formula.Parse(text, 1, constants)).Faults.Single();
        Assert.StartsWith(remedy, fault.Remedy, StringComparison.Ordinal);
    }

    [Fact]
    public void Parse_LongFormula_ShowsAWindowAroundTheCaret()
    {
        var text = string.Join(" + ", Enumerable.Repeat("x", 200)) + " + q + " + string.Join(" + ", Enumerable.Repeat("x", 200));
        var fault = Assert.Throws<InputException>(() => Formula.Parse(text, 1)).Faults.Single();
        var lines = fault.Detail!.Split('\n');
        Assert.True(lines[0].Length <= 106);
        Assert.Equal('q', lines[0][lines[1].Length - 1]);
    }

    [Theory]
    [InlineData("x", 2001, "characters")]
    [InlineData("(", 1000, "nested")]
    [InlineData("-", 1000, "nested")]
    [InlineData("x^", 900, "nested")]
    [InlineData("sin(", 400, "nested")]
    public void Parse_BeyondLimits_Refused(string part, int times, string word)
    {
        var fault = Assert.Throws<InputException>(() => Formula.Parse(string.Concat(Enumerable.Repeat(part, times)), 1)).Faults.Single();
        Assert.Contains(word, fault.Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Parse_LongestAndDeepestAllowed_Works()
    {
        var deep = new string('(', FormulaLanguage.DeepestNesting) + "x" + new string(')', FormulaLanguage.DeepestNesting);
        Assert.Equal(3.0, Formula.Parse(deep, 1).ValueAt(3));
        var sum = "x" + string.Concat(Enumerable.Repeat("+x", 999));
        var value = new double[3];
        Formula.Parse(sum, 1).Value([1.0, 2.0, 3.0], [], value);
        Assert.Equal([1000.0, 2000.0, 3000.0], value);
        // A thousand different terms: nothing collapses, and nothing recurses.
        var terms = string.Join("+", Enumerable.Range(1, 180).Select(k => $"sin({k}*x)"));
        Formula.Parse(terms, 1).Value([0.1, 0.2, 0.3], [], value);
        Assert.Equal(Enumerable.Range(1, 180).Sum(k => Math.Sin(k * 0.2)), value[1], 1e-11);
    }

    [Fact]
    public void Parse_ConstantWithAReservedOrImproperName_Throws()
    {
        Assert.Throws<ArgumentException>(() => Formula.Parse("x", 1, new Dictionary<string, double> { ["sin"] = 1 }));
        Assert.Throws<ArgumentException>(() => Formula.Parse("x", 1, new Dictionary<string, double> { ["2a"] = 1 }));
        Assert.Throws<ArgumentOutOfRangeException>(() => Formula.Parse("x", 1, new Dictionary<string, double> { ["a"] = double.NaN }));
        Assert.Throws<ArgumentException>(() => Formula.Parse("x", 3));
    }

    private static readonly Gen<string> Noise = Gen.Frequency(
        (3, Gen.String[Gen.Char, 0, 300]),
        (5, Gen.String[Gen.OneOf("xyepi0123456789.+-*/^(), sinmaxabsqrtlogtanheErf\t\n".ToCharArray()), 0, 300]),
        (4, Gen.OneOf("x", "y", "pi", "e", "1", "2.5", "1e3", "+", "-", "*", "/", "^", "(", ")", ",", "sin(", "min(", "abs(", "step(", "-", "k").Array[0, 120]
            .Select(parts => string.Concat(parts))));

    /// <summary>Whatever the text: either a formula or one fault with a caret, in bounded time. What parses must also evaluate.</summary>
    [Fact]
    public void Parse_RandomText_NeverCrashesOrHangs()
    {
        var constants = new Dictionary<string, double> { ["k"] = 2 };
        var right = 0;
        Noise.Sample(text =>
        {
            try
            {
                var formula = Formula.Parse(text, 2, constants);
                formula.ValueAt(0.3, -0.7);
                _ = formula.AsQuadratic();
                _ = formula.AsAbsoluteValue();
                Interlocked.Increment(ref right);
            }
            catch (InputException exception)
            {
                var fault = exception.Faults.Single();
                Assert.EndsWith(".", fault.Message, StringComparison.Ordinal);
                Assert.NotNull(fault.Detail);
            }
        }, iter: 20000);
        Assert.True(right > 20, $"Only {right} texts were formulas: the noise is too wild to test anything.");
    }
}
