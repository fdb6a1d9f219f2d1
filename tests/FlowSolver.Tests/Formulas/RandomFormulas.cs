using System.Globalization;
using CsCheck;

namespace FlowSolver.Tests.Formulas;

/// <summary>
/// Value and derivatives to second order in x and y, carried forward by the chain rule: an opinion on derivatives that shares nothing with the
/// symbolic one. Each component remembers the size of the terms it was summed from, so that a test can tell rounding from error.
/// </summary>
public readonly struct Jet
{
    private readonly double[] value;
    private readonly double[] size;

    private Jet(double[] value, double[] size, bool isDoubtful)
    {
        this.value = value;
        this.size = size;
        IsDoubtful = isDoubtful || !Array.TrueForAll(value, one => Math.Abs(one) < 1e60) || !Array.TrueForAll(size, one => Math.Abs(one) < 1e60);
    }

    /// <summary>
    /// Whether something on the way switched so close by that rounding decides the side, or was no number, or so large that its square or its
    /// reciprocal would leave the range.
    /// </summary>
    public bool IsDoubtful { get; }

    /// <summary>Components: V, V_x, V_y, V_xx, V_xy, V_yy.</summary>
    public double this[int component] => value[component];

    public double Size(int component) => size[component];

    public static Jet Constant(double number) => new([number, 0, 0, 0, 0, 0], [Math.Abs(number), 0, 0, 0, 0, 0], false);

    public static Jet X(double x) => new([x, 1, 0, 0, 0, 0], [Math.Abs(x), 1, 0, 0, 0, 0], false);

    public static Jet Y(double y) => new([y, 0, 1, 0, 0, 0], [Math.Abs(y), 0, 1, 0, 0, 0], false);

    public static Jet operator +(Jet a, Jet b) => Combine(a, b, 1);

    public static Jet operator -(Jet a, Jet b) => Combine(a, b, -1);

    public static Jet operator -(Jet a) => Constant(0) - a;

    public static Jet operator *(Jet a, Jet b) => new(Product(a.value, b.value), Product(a.size, b.size), a.IsDoubtful || b.IsDoubtful);

    /// <summary>f(a) from f and its first three derivatives at a.</summary>
    public static Jet Apply(Jet a, double f, double f1, double f2, double f3, bool isDoubtful = false)
        => new(Chain(a.value, f, f1, f2),
            Chain(a.size, Math.Abs(f) + Math.Abs(f1) * a.size[0], Math.Abs(f1) + Math.Abs(f2) * a.size[0], Math.Abs(f2) + Math.Abs(f3) * a.size[0]),
            a.IsDoubtful || isDoubtful);

    /// <summary>One of two jets by the sign of a third.</summary>
    public static Jet Choose(Jet condition, Jet below, Jet otherwise)
    {
        var near = !(Math.Abs(condition[0]) > 1e-9 * (1 + condition.Size(0))) || below.IsDoubtful || otherwise.IsDoubtful || condition.IsDoubtful;
        var chosen = condition[0] < 0 ? below : otherwise;
        return new(chosen.value, chosen.size, near);
    }

    private static Jet Combine(Jet a, Jet b, double factor)
    {
        var (sum, sizes) = (new double[6], new double[6]);
        for (var i = 0; i < 6; i++)
            (sum[i], sizes[i]) = (a.value[i] + factor * b.value[i], a.size[i] + b.size[i]);
        return new(sum, sizes, a.IsDoubtful || b.IsDoubtful);
    }

    private static double[] Product(double[] a, double[] b) =>
    [
        a[0] * b[0],
        a[1] * b[0] + a[0] * b[1],
        a[2] * b[0] + a[0] * b[2],
        a[3] * b[0] + 2 * a[1] * b[1] + a[0] * b[3],
        a[4] * b[0] + a[1] * b[2] + a[2] * b[1] + a[0] * b[4],
        a[5] * b[0] + 2 * a[2] * b[2] + a[0] * b[5],
    ];

    private static double[] Chain(double[] a, double f, double f1, double f2) =>
    [
        f,
        f1 * a[1],
        f1 * a[2],
        f1 * a[3] + f2 * a[1] * a[1],
        f1 * a[4] + f2 * a[1] * a[2],
        f1 * a[5] + f2 * a[2] * a[2],
    ];
}

/// <summary>A formula as text together with its evaluation by jets.</summary>
public sealed record RandomFormula(string Text, Func<double, double, Jet> Evaluate, int Depth)
{
    public static readonly Dictionary<string, double> Constants = new() { ["a"] = 0.75, ["b_2"] = -1.5 };

    /// <summary>Formulas of x and y of all kinds.</summary>
    public static Gen<RandomFormula> Any { get; } = OfDepth(4, 2);

    /// <summary>Formulas of x alone.</summary>
    public static Gen<RandomFormula> OfX { get; } = OfDepth(4, 1);

    private static Gen<RandomFormula> OfDepth(int depth, int dimension)
    {
        if (depth == 0)
            return Leaf(dimension);
        var inner = OfDepth(depth - 1, dimension);
        return Gen.Frequency(
            (1, Leaf(dimension)),
            (4, Gen.Select(inner, inner, Gen.Int[0, 5]).Select((left, right, kind) => Binary(left, right, kind))),
            (3, Gen.Select(inner, Gen.Int[0, 15]).Select((argument, kind) => Unary(argument, kind))),
            (1, Gen.Select(inner, Gen.Int[-3, 6]).Select((argument, exponent) => Power(argument, exponent))));
    }

    private static Gen<RandomFormula> Leaf(int dimension)
    {
        var number = Gen.OneOf(0.5, 1.0, 2.0, 3.0, 0.1, 1.25, 7.0, 1e-3, 40.0).Select(value => new RandomFormula(
            value.ToString("R", CultureInfo.InvariantCulture), (_, _) => Jet.Constant(value), 0));
        var name = Gen.OneOf("a", "b_2").Select(key => new RandomFormula(key, (_, _) => Jet.Constant(Constants[key]), 0));
        var x = Gen.Const(new RandomFormula("x", (x, _) => Jet.X(x), 0));
        var y = Gen.Const(new RandomFormula("y", (_, y) => Jet.Y(y), 0));
        return dimension == 1 ? Gen.Frequency((2, number), (1, name), (5, x)) : Gen.Frequency((2, number), (1, name), (3, x), (3, y));
    }

    private static RandomFormula Binary(RandomFormula left, RandomFormula right, int kind)
    {
        var depth = 1 + Math.Max(left.Depth, right.Depth);
        var (a, b) = ($"({left.Text})", $"({right.Text})");
        return kind switch
        {
            0 => new($"{a}+{b}", (x, y) => left.Evaluate(x, y) + right.Evaluate(x, y), depth),
            1 => new($"{a} - {b}", (x, y) => left.Evaluate(x, y) - right.Evaluate(x, y), depth),
            2 => new($"{a}*{b}", (x, y) => left.Evaluate(x, y) * right.Evaluate(x, y), depth),
            3 => new($"{a} / {b}", (x, y) => left.Evaluate(x, y) * Reciprocal(right.Evaluate(x, y)), depth),
            4 => new($"min({a}, {b})", (x, y) => Smaller(left.Evaluate(x, y), right.Evaluate(x, y)), depth),
            _ => new($"max({a}, {b})", (x, y) => -Smaller(-left.Evaluate(x, y), -right.Evaluate(x, y)), depth),
        };
    }

    private static Jet Smaller(Jet a, Jet b) => Jet.Choose(a - b, a, b);

    private static Jet Reciprocal(Jet u) => Jet.Apply(u, 1 / u[0], -1 / (u[0] * u[0]), 2 / Math.Pow(u[0], 3), -6 / Math.Pow(u[0], 4));

    private static RandomFormula Power(RandomFormula argument, int exponent)
    {
        if (exponent >= 5)
        {
            var half = exponent == 5 ? 1.5 : 0.7;
            return new($"(abs({argument.Text}))^{half.ToString(CultureInfo.InvariantCulture)}", (x, y) =>
            {
                var u = argument.Evaluate(x, y);
                var magnitude = Jet.Choose(u, -u, u);
                var v = magnitude[0];
                return Jet.Apply(magnitude, Math.Pow(v, half), half * Math.Pow(v, half - 1), half * (half - 1) * Math.Pow(v, half - 2),
                    half * (half - 1) * (half - 2) * Math.Pow(v, half - 3));
            }, argument.Depth + 1);
        }

        return new($"({argument.Text})^{(exponent < 0 ? $"(0-{-exponent})" : exponent.ToString(CultureInfo.InvariantCulture))}", (x, y) =>
        {
            var u = argument.Evaluate(x, y);
            var power = Jet.Constant(1);
            for (var i = 0; i < Math.Abs(exponent); i++)
                power *= u;
            return exponent < 0 ? Reciprocal(power) : power;
        }, argument.Depth + 1);
    }

    private static RandomFormula Unary(RandomFormula argument, int kind)
    {
        string[] names = ["exp", "log", "sqrt", "abs", "sin", "cos", "tan", "sinh", "cosh", "tanh", "atan", "sign", "erf", "step", "-", "exp"];
        var text = names[kind] == "-" ? $"-({argument.Text})" : $"{names[kind]}({argument.Text})";
        return new(text, (x, y) => Function(kind, argument.Evaluate(x, y)), argument.Depth + 1);
    }

    private static Jet Function(int kind, Jet u)
    {
        var v = u[0];
        switch (kind)
        {
            case 1:
                return Jet.Apply(u, Math.Log(v), 1 / v, -1 / (v * v), 2 / (v * v * v));
            case 2:
                var root = Math.Sqrt(v);
                return Jet.Apply(u, root, 0.5 / root, -0.25 / (root * v), 0.375 / (root * v * v));
            case 3:
                return Jet.Choose(u, -u, u);
            case 4:
                return Jet.Apply(u, Math.Sin(v), Math.Cos(v), -Math.Sin(v), -Math.Cos(v));
            case 5:
                return Jet.Apply(u, Math.Cos(v), -Math.Sin(v), -Math.Cos(v), Math.Sin(v));
            case 6:
                var (t, s) = (Math.Tan(v), 1 / Math.Cos(v) / Math.Cos(v));
                return Jet.Apply(u, t, s, 2 * t * s, 2 * s * s + 4 * t * t * s);
            case 7:
                return Jet.Apply(u, Math.Sinh(v), Math.Cosh(v), Math.Sinh(v), Math.Cosh(v));
            case 8:
                return Jet.Apply(u, Math.Cosh(v), Math.Sinh(v), Math.Cosh(v), Math.Sinh(v));
            case 9:
                var (h, q) = (Math.Tanh(v), 1 / Math.Cosh(v) / Math.Cosh(v));
                return Jet.Apply(u, h, q, -2 * h * q, 4 * h * h * q - 2 * q * q);
            case 10:
                var d = 1 / (1 + v * v);
                return Jet.Apply(u, Math.Atan(v), d, -2 * v * d * d, (6 * v * v - 2) * d * d * d);
            case 11:
                return Jet.Choose(u, Jet.Constant(-1), Jet.Constant(1));
            case 12:
                var bell = 2 / Math.Sqrt(Math.PI) * Math.Exp(-v * v);
                return Jet.Apply(u, MathNet.Numerics.SpecialFunctions.Erf(v), bell, -2 * v * bell, (4 * v * v - 2) * bell);
            case 13:
                return Jet.Choose(u, Jet.Constant(0), Jet.Constant(1));
            case 14:
                return -u;
            default:
                var e = Math.Exp(v);
                return Jet.Apply(u, e, e, e, e);
        }
    }
}
