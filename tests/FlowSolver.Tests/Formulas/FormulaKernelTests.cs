using CsCheck;
using FlowSolver.Formulas;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Tests.Formulas;

/// <summary>
/// Compiled loops. Mutation tried: the last points filled up from the start of the span instead of its end (x[..rest] for x[whole..]); the test of
/// remainder lengths failed. Mutation tried: loads moved to where their value is
/// used, so that some come after a store; the test of overlapping spans failed.
/// </summary>
public class FormulaKernelTests
{
    private static readonly string[] Formulas =
    [
        "x",
        "3",
        "x^2*y - 2*x^3 + x^-3 + (x+y)^7",
        "exp(-x^2)*sin(3*y) + cos(3*y)*log(x^2+1)",
        "sqrt(x^2+y^2) + tanh(x) + sinh(y) + cosh(x*y) + atan(x-y) + erf(x) + tan(y/4)",
        "max(x, y) + min(x^2, 1) + abs(x-1) + sign(y) + step(x+y) + abs(y)^1.5 + (x^2+1)^0.3 + 2^x + (1+x^2)^y",
    ];

    private static (double[] X, double[] Y) Points(int count)
    {
        var (x, y) = (new double[count], new double[count]);
        for (var i = 0; i < count; i++)
            (x[i], y[i]) = (-1.9 + 0.37 * i % 3.8, 1.7 - 0.53 * i % 3.5);
        return (x, y);
    }

    [Theory]
    [InlineData(0)]
    [InlineData(1)]
    [InlineData(2)]
    [InlineData(3)]
    [InlineData(4)]
    [InlineData(5)]
    [InlineData(6)]
    [InlineData(7)]
    [InlineData(8)]
    [InlineData(9)]
    [InlineData(15)]
    [InlineData(16)]
    [InlineData(17)]
    [InlineData(1001)]
    public void Value_AnyLength_AgreesWithTheTree(int count)
    {
        var (x, y) = Points(count);
        foreach (var text in Formulas)
        {
            var formula = Formula.Parse(text, 2);
            // One more element on either side, to see that nothing beyond the span is written.
            var padded = new double[count + 2];
            Array.Fill(padded, -77.0);
            formula.Value(x, y, padded.AsSpan(1, count));
            Assert.Equal(-77.0, padded[0]);
            Assert.Equal(-77.0, padded[^1]);
            for (var i = 0; i < count; i++)
            {
                var expected = formula.ValueAt(x[i], y[i]);
                Assert.Equal(expected, padded[i + 1], 1e-13 * (1 + Math.Abs(expected)));
            }
        }
    }

    [Fact]
    public void Value_RandomFormula_AgreesWithTheTree()
    {
        var (x, y) = Points(11);
        RandomFormula.Any.Sample(random =>
        {
            var formula = Formula.Parse(random.Text, 2, RandomFormula.Constants);
            var value = new double[x.Length];
            formula.Value(x, y, value);
            for (var i = 0; i < x.Length; i++)
            {
                var jet = random.Evaluate(x[i], y[i]);
                if (!jet.IsDoubtful)
                    Assert.Equal(formula.ValueAt(x[i], y[i]), value[i], 1e-13 * jet.Size(0) + 1e-300);
            }
        }, iter: 150);
    }

    /// <summary>A point's value does not depend on where in a span it stands.</summary>
    [Fact]
    public void Value_ShiftedSpan_GivesTheSameBytes()
    {
        var (x, y) = Points(40);
        foreach (var text in Formulas)
        {
            var formula = Formula.Parse(text, 2);
            var all = new double[x.Length];
            formula.Value(x, y, all);
            for (var from = 0; from < 9; from++)
            {
                var part = new double[x.Length - from - 3];
                formula.Value(x.AsSpan(from, part.Length), y.AsSpan(from, part.Length), part);
                Assert.Equal(all.AsSpan(from, part.Length).ToArray(), part);
            }
        }
    }

    [Theory]
    [InlineData("x*y")]
    [InlineData("x^2*y + exp(x-y)")]
    public void Gradient_TargetIsSource_GivesTheSame(string text)
    {
        var potential = FormulaPotential.Parse(text, 2);
        var (x, y) = Points(21);
        var (gx, gy) = (new double[x.Length], new double[x.Length]);
        potential.Gradient(x, y, gx, gy);
        potential.Gradient(x, y, x, y);
        Assert.Equal(gx, x);
        Assert.Equal(gy, y);
    }

    [Fact]
    public void Evaluation_AfterTheFirstCall_AllocatesNothing()
    {
        var potential = FormulaPotential.Parse(Formulas[^1], 2);
        var (x, y) = Points(1003);
        var targets = new double[6][];
        for (var c = 0; c < 6; c++)
            targets[c] = new double[x.Length];
        void Evaluate()
        {
            potential.Value(x, y, targets[0]);
            potential.Gradient(x, y, targets[1], targets[2]);
            potential.Jet(x, y, new PotentialJet
            {
                Value = targets[0],
                GradientX = targets[1],
                GradientY = targets[2],
                HessianXX = targets[3],
                HessianXY = targets[4],
                HessianYY = targets[5],
            });
        }

        Evaluate();
        Evaluate();
        var before = GC.GetAllocatedBytesForCurrentThread();
        for (var i = 0; i < 10; i++)
            Evaluate();
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }

    [Fact]
    public void Evaluation_WrongLengths_Throws()
    {
        var potential = FormulaPotential.Parse("x*y", 2);
        Assert.Throws<ArgumentException>(() => potential.Value(new double[3], new double[2], new double[3]));
        Assert.Throws<ArgumentException>(() => potential.Value(new double[3], new double[3], new double[2]));
        Assert.Throws<ArgumentException>(() => potential.Gradient(new double[3], new double[3], new double[3], new double[4]));
        Assert.Throws<ArgumentException>(() => potential.Gradient(new double[3], [], new double[3], new double[3]));
    }

    /// <summary>Shared subexpressions are one node across value, gradient and Hessian: a Gaussian's one exponential serves all six.</summary>
    [Fact]
    public void Graph_GaussianBump_HasOneExponential()
    {
        var formula = Formula.Parse("exp(-(x^2+y^2)/2)", 2);
        var x = formula.DerivativeNode(formula.Root, false);
        var y = formula.DerivativeNode(formula.Root, true);
        var order = FormulaEvaluator.OrderOf(
            [formula.Root, x, y, formula.DerivativeNode(x, false), formula.DerivativeNode(x, true), formula.DerivativeNode(y, true)]);
        Assert.Single(order, node => node.Kind == NodeKind.Exp);
        Assert.True(order.Length < 30, $"{order.Length} nodes");
    }

    [Fact]
    public void Parse_FormulaWithHugeDerivatives_RefusedOrCompiledInTime()
    {
        var text = "x*y";
        for (var i = 0; i < 60; i++)
            text = $"sin({text}+x)";
        var potential = FormulaPotential.Parse(text, 2);
        var (x, y) = Points(9);
        var value = new double[9];
        potential.Value(x, y, value);
        Assert.Equal(potential.ValueAt(x[3], y[3]), value[3], 1e-12);
        var many = string.Join("*", Enumerable.Range(1, 150).Select(k => $"(x-{k})*y"));
        try
        {
            FormulaPotential.Parse(many, 2).Value(x, y, value);
        }
        catch (InputException exception)
        {
            Assert.Contains("operations", exception.Message, StringComparison.Ordinal);
        }
    }
}
