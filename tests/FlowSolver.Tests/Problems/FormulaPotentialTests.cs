using CsCheck;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Tests.Problems;

/// <summary>
/// Landscapes given by formulas. Mutation tried: the extremum between two samples not looked at; the pair of kinks of abs((x−0.1)² − 1e-10) was lost.
/// Mutation tried: one-sided slopes evaluated beside the kink instead of at it with its branch kept; the slopes of abs(sin(x)) lost their digits.
/// </summary>
public class FormulaPotentialTests
{
    public static TheoryData<string, double[]> KinkPlaces => new()
    {
        { "x^2", [] },
        { "abs(x)", [0] },
        { "abs(x - 0.3) + abs(x + 1.1)", [-1.1, 0.3] },
        { "max(x, -2*x + 1)", [1.0 / 3] },
        { "min(x^2, 1)", [-1, 1] },
        { "abs(sin(3*x))", [-Math.PI / 3, 0, Math.PI / 3] },
        { "abs(x)*abs(x)", [] },
        { "x*abs(x)", [] },
        { "abs(x)^3 + x^2", [] },
        { "abs(x) - abs(x)", [] },
        { "max(0, x)^2", [] },
        { "abs((x-0.1)^2 - 1e-10)", [0.1 - 1e-5, 0.1 + 1e-5] },
        { "abs((x-0.1)^2 + 1e-10)", [] },
        { "abs((x - 0.2)^2)", [] },
        { "step(x - 0.7)", [0.7] },
        { "sign(x)", [0] },
        { "step(x)*x", [0] },
        { "step(x)*x^2", [] },
        { "abs(abs(x) - 0.5)", [-0.5, 0, 0.5] },
        { "max(abs(x), 0.5)", [-0.5, 0.5] },
        { "abs(exp(x) - 2)", [Math.Log(2)] },
        { "sqrt((x - 0.25)^2)", [0.25] },
        { "abs(tanh(50*(x - 0.123456)))", [0.123456] },
        { "abs(x - 2)", [] },
        { "abs(x - 1.9999)", [1.9999] },
        { "step(abs(x) - 1)", [-1, 1] },
    };

    [Theory]
    [MemberData(nameof(KinkPlaces))]
    public void FindKinks_OnTheInterval_FindsThemToRounding(string text, double[] places)
    {
        var potential = FormulaPotential.Parse(text, 1);
        var kinks = potential.FindKinks(new Interval(-1.7, 2));
        Assert.Equal(places.Length, kinks.Count);
        for (var i = 0; i < places.Length; i++)
            Assert.Equal(places[i], kinks[i].Position, text.Contains("1e-10", StringComparison.Ordinal) ? 1e-14 : 1e-15);
    }

    [Theory]
    [InlineData("3*abs(x - 0.5)", 0.5, -3, 3, 0)]
    [InlineData("max(x, -2*x + 1)", 1.0 / 3, -2, 1, 0)]
    [InlineData("step(x - 0.7)*4 + x^2", 0.7, 1.4, 1.4, 4)]
    [InlineData("abs(sin(x))", 0, -1, 1, 0)]
    [InlineData("sign(x)*(1 + x)", 0, -1, 1, 2)]
    [InlineData("exp(abs(x))", 0, -1, 1, 0)]
    [InlineData("x^2*step(x - 1) + abs(x - 1)", 1, -1, 3, 1)]
    public void FindKinks_OneKink_HasSlopesAndJump(string text, double position, double before, double after, double jump)
    {
        var kink = Assert.Single(FormulaPotential.Parse(text, 1).FindKinks(new Interval(-2, 2)));
        Assert.Equal(position, kink.Position, 1e-15);
        Assert.Equal(before, kink.SlopeBefore, 1e-13);
        Assert.Equal(after, kink.SlopeAfter, 1e-13);
        Assert.Equal(jump, kink.Jump, 1e-13);
    }

    [Fact]
    public void FindKinks_Cusp_HasInfiniteSlopes()
    {
        var kink = Assert.Single(FormulaPotential.Parse("sqrt(abs(x))", 1).FindKinks(new Interval(-2, 2)));
        Assert.Equal(0, kink.Position);
        Assert.Equal(double.NegativeInfinity, kink.SlopeBefore);
        Assert.Equal(double.PositiveInfinity, kink.SlopeAfter);
    }

    /// <summary>Between its kinks a potential has no others: slopes on both sides of every point agree.</summary>
    [Fact]
    public void FindKinks_RandomBrokenLines_AreAllFound()
    {
        var line = Gen.Select(Gen.Int[-40, 40], Gen.Int[-19, 19], Gen.Int[1, 9]);
        line.Array[1, 5].Sample(parts =>
        {
            var text = string.Join(" + ", parts.Select(part => FormattableString.Invariant($"{part.Item3}*abs(x - {part.Item2 / 10.0})")));
            text = text.Replace("- -", "+ ", StringComparison.Ordinal);
            var expected = parts.GroupBy(part => part.Item2).OrderBy(group => group.Key).ToArray();
            var kinks = FormulaPotential.Parse(text, 1).FindKinks(new Interval(-2, 2));
            Assert.Equal(expected.Length, kinks.Count);
            for (var i = 0; i < kinks.Count; i++)
            {
                Assert.Equal(expected[i].Key / 10.0, kinks[i].Position, 1e-15);
                Assert.Equal(2.0 * expected[i].Sum(part => part.Item3), kinks[i].SlopeAfter - kinks[i].SlopeBefore, 1e-12);
            }
        }, iter: 60);
    }

    [Fact]
    public void FindKinks_InTwoDimensions_Throws()
        => Assert.Throws<ArgumentException>(() => FormulaPotential.Parse("abs(x)+abs(y)", 2).FindKinks(new Interval(0, 1)));

    [Fact]
    public void Form_OfKnownLandscapes_IsRecognised()
    {
        Assert.Equal(new QuadraticForm(0.5, -1, 0, 1, 0, 0), FormulaPotential.Parse("(x-1)^2/2", 1).Form);
        Assert.Equal(new QuadraticForm(0, 0, 0, 2, -2, 4), FormulaPotential.Parse("x^2 - 2*x*y + 2*y^2", 2).Form);
        Assert.Equal(new AbsoluteValueForm(1, 2, 0.5), FormulaPotential.Parse("abs(1 - 2*x) + 1", 1).Form);
        Assert.Null(FormulaPotential.Parse("x^4", 1).Form);
        Assert.Null(FormulaPotential.Parse("abs(x) + y", 2).Form);
        Assert.True(FormulaPotential.Parse("abs(x)*abs(x)", 1).IsSmooth);
        Assert.False(FormulaPotential.Parse("abs(x)", 1).IsSmooth);
    }

    [Theory]
    [InlineData("log(x)", "was minus infinity at x = 0; it must be finite")]
    [InlineData("1/(x - 0.25)", "was infinite at x = 0.25")]
    [InlineData("sqrt(x - 0.5)", "was not a number at x = 0;")]
    [InlineData("exp(1000*x)", "was infinite at x = 0.75")]
    public void RequireFinite_SomewhereNot_NamesThePlace(string text, string part)
    {
        var formula = FormulaPotential.Parse(text, 1).Formula;
        var fault = Assert.Throws<InputException>(() => FormulaCheck.RequireFinite(formula, "The potential", new Domain(new Interval(0, 1)), 5)).Faults.Single();
        Assert.Contains(part, fault.Message, StringComparison.Ordinal);
        Assert.Equal(text, fault.Detail);
    }

    [Fact]
    public void RequireFinite_InTwoDimensions_NamesBothCoordinates()
    {
        var domain = new Domain(new Interval(-1, 1), new Interval(-1, 1));
        var formula = FormulaPotential.Parse("1/(x - y + 1.5)", 2).Formula;
        var fault = Assert.Throws<InputException>(() => FormulaCheck.RequireFinite(formula, "The potential", domain, 5, 5)).Faults.Single();
        Assert.Contains("at x = -1, y = 0.5;", fault.Message, StringComparison.Ordinal);
        FormulaCheck.RequireFinite(FormulaPotential.Parse("1/(x - y + 2.1)", 2).Formula, "The potential", domain, 5, 5);
        Assert.Throws<InputException>(() => FormulaCheck.RequireFinite(FormulaPotential.Parse("x", 2).Formula, "The start", domain, 5, 5, mayBeNegative: false));
    }

    [Fact]
    public void RequireSlope_PartOverflows_NamesThePlace()
    {
        var domain = new Domain(new Interval(0, 1));
        var fault = Assert.Throws<InputException>(
            () => FormulaCheck.RequireSlope(FormulaPotential.Parse("1/(1 + exp(1000*x))", 1), domain, 5)).Faults.Single();
        Assert.Contains("at x = 0.75", fault.Message, StringComparison.Ordinal);
        FormulaCheck.RequireSlope(FormulaPotential.Parse("tanh(1000*x)", 1), domain, 5);
        FormulaCheck.RequireSlope(FormulaPotential.Parse("sqrt(x)", 1), domain, 5);
    }

    /// <summary>Both derivatives of a steep wall stay numbers where cosh overflows.</summary>
    [Fact]
    public void Jet_SteepTanh_StaysFinite()
    {
        var (value, slope, curvature) = (new double[3], new double[3], new double[3]);
        FormulaPotential.Parse("tanh(1000*x)", 1).Jet([-5.0, 0, 3.0], [], new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature });
        Assert.Equal([-1.0, 0, 1], value);
        Assert.Equal([0.0, 1000, 0], slope);
        Assert.All(curvature, one => Assert.Equal(0, one));
    }
}
