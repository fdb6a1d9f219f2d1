using System.Runtime.Intrinsics;
using FlowSolver.Formulas;

namespace FlowSolver.Tests.Formulas;

/// <summary>
/// Vector functions against the scalar library. Mutation tried: the last digit but three of the first coefficient of erf changed; the test of erf and
/// the published table failed.
/// </summary>
public class VectorFunctionsTests
{
    public static TheoryData<string, double, double, double> Cases => new()
    {
        // Name, range, largest error in units in the last place of the result.
        { "tanh", -25, 25, 4 },
        { "tanh", -0.01, 0.01, 4 },
        { "sinh", -40, 40, 4 },
        { "sinh", -0.3, 0.3, 4 },
        { "sinh", 700, 710.4, 4 },
        { "cosh", -30, 30, 4 },
        { "cosh", 700, 710.4, 4 },
        { "atan", -3, 3, 3 },
        { "atan", -1e6, 1e6, 3 },
        { "atan", -0.01, 0.01, 3 },
        { "erf", -7, 7, 4 },
        { "erf", -0.01, 0.01, 4 },
        { "tan", -10, 10, 6 },
    };

    [Theory]
    [MemberData(nameof(Cases))]
    public void Function_OverItsRange_IsAccurate(string name, double from, double to, double units)
    {
        const int count = 20000;
        var worst = 0.0;
        Span<double> lanes = stackalloc double[8];
        for (var i = 0; i < count; i += 8)
        {
            for (var k = 0; k < 8; k++)
                lanes[k] = from + (to - from) * ((i + k + 0.5) / count);
            var found = Vector(name, Vector512.Create<double>(lanes));
            for (var k = 0; k < 8; k++)
            {
                var exact = Scalar(name, lanes[k]);
                worst = Math.Max(worst, Math.Abs(found[k] - exact) / Math.BitIncrement(Math.Abs(exact)) / 2.2e-16);
            }
        }

        Assert.True(worst <= units, $"{name} on [{from}, {to}]: {worst:f2} units in the last place");
    }

    [Theory]
    [InlineData("tanh", 0, 0)]
    [InlineData("tanh", double.PositiveInfinity, 1)]
    [InlineData("tanh", double.NegativeInfinity, -1)]
    [InlineData("tanh", double.NaN, double.NaN)]
    [InlineData("sinh", double.NegativeInfinity, double.NegativeInfinity)]
    [InlineData("sinh", double.NaN, double.NaN)]
    [InlineData("cosh", double.NegativeInfinity, double.PositiveInfinity)]
    [InlineData("cosh", 0, 1)]
    [InlineData("cosh", double.NaN, double.NaN)]
    [InlineData("atan", double.PositiveInfinity, Math.PI / 2)]
    [InlineData("atan", double.NegativeInfinity, -Math.PI / 2)]
    [InlineData("atan", double.NaN, double.NaN)]
    [InlineData("erf", double.PositiveInfinity, 1)]
    [InlineData("erf", double.NegativeInfinity, -1)]
    [InlineData("erf", double.NaN, double.NaN)]
    [InlineData("sign", -3, -1)]
    [InlineData("sign", 0, 0)]
    [InlineData("sign", double.PositiveInfinity, 1)]
    [InlineData("sign", double.NaN, double.NaN)]
    [InlineData("step", -1e-300, 0)]
    [InlineData("step", 0, 1)]
    [InlineData("step", double.NaN, double.NaN)]
    public void Function_SpecialArgument_HasItsLimit(string name, double argument, double expected)
    {
        // Different neighbours must not matter.
        var found = Vector(name, Vector512.Create(1.0, argument, -2.0, 0.3, 50.0, argument, 0.0, -0.1));
        Assert.Equal(expected, found[1]);
        Assert.Equal(expected, found[5]);
        Assert.Equal(expected, Scalar(name, argument));
    }

    [Fact]
    public void Power_AnyArguments_IsThatOfTheLibrary()
    {
        var found = VectorFunctions.Power(
            Vector512.Create(2.0, -2.0, 0.0, 0.0, -2.0, 10.0, double.NaN, 3.0), Vector512.Create(0.5, 3.0, 0.0, -1.0, 0.5, -2.0, 1.0, double.NaN));
        Assert.Equal(Math.Sqrt(2), found[0], 1e-16);
        Assert.Equal(-8, found[1]);
        Assert.Equal(1, found[2]);
        Assert.Equal(double.PositiveInfinity, found[3]);
        Assert.Equal(double.NaN, found[4]);
        Assert.Equal(0.01, found[5], 1e-18);
        Assert.Equal(double.NaN, found[6]);
        Assert.Equal(double.NaN, found[7]);
    }

    private static Vector512<double> Vector(string name, Vector512<double> u) => name switch
    {
        "tanh" => VectorFunctions.Tanh(u),
        "sinh" => VectorFunctions.Sinh(u),
        "cosh" => VectorFunctions.Cosh(u),
        "atan" => VectorFunctions.Atan(u),
        "erf" => VectorFunctions.Erf(u),
        "tan" => VectorFunctions.Tan(u),
        "sign" => VectorFunctions.Sign(u),
        _ => VectorFunctions.Step(u),
    };

    private static double Scalar(string name, double u)
        => FormulaEvaluator.Function(Enum.Parse<NodeKind>(name, ignoreCase: true), u);
}
