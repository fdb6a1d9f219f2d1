namespace FlowSolver.Formulas;

/// <summary>
/// Finds out symbolically whether a formula is a polynomial of degree at most 2, or c + a|x − x₀|, however it is written. Coefficients that cancel
/// to within 64 units of rounding of what they were made of count as 0.
/// </summary>
internal sealed class PolynomialStructure
{
    private const double Rounding = 64 * 2.220446049250313e-16;

    public PolynomialStructure(FormulaNode root, int dimension)
    {
        var order = FormulaEvaluator.OrderOf([root]);
        if (Expand(order, null, 0) is { Degree: <= 2 } polynomial)
        {
            Quadratic = new QuadraticStructure(
                polynomial[0, 0], polynomial[1, 0], polynomial[0, 1], 2 * polynomial[2, 0], polynomial[1, 1], 2 * polynomial[0, 2]);
        }
        else if (dimension == 1)
        {
            AbsoluteValue = FindAbsoluteValue(order);
        }
    }

    public QuadraticStructure? Quadratic { get; }

    public AbsoluteValueStructure? AbsoluteValue { get; }

    private static AbsoluteValueStructure? FindAbsoluteValue(FormulaNode[] order)
    {
        // The first switch has a smooth argument; its zero is the only possible centre.
        if (FindCenter(order) is not { } center)
            return null;
        if (Expand(order, center, -1) is not { Degree: <= 1 } before || Expand(order, center, 1) is not { Degree: <= 1 } after)
            return null;
        var (left, right) = (before[1, 0], after[1, 0]);
        var (valueLeft, valueRight) = (before[0, 0] + left * center, after[0, 0] + right * center);
        var scale = Math.Abs(before[0, 0]) + Math.Abs(after[0, 0]) + (Math.Abs(left) + Math.Abs(right)) * Math.Abs(center);
        if (!(right > 0) || Math.Abs(left + right) > Rounding * right || Math.Abs(valueLeft - valueRight) > Rounding * scale)
            return null;
        return new AbsoluteValueStructure(valueRight, right, center);
    }

    private static double? FindCenter(FormulaNode[] order)
    {
        var known = new Dictionary<FormulaNode, Polynomial?>();
        foreach (var node in order)
        {
            var polynomial = Combine(node, known, null, 0);
            known.Add(node, polynomial);
            if (polynomial is not null || node.A is null)
                continue;
            if (node.Kind == NodeKind.Sqrt)
                return known[node.A]?.SquareRoot() is { } root ? Zero(root) : null;
            if (!node.IsSwitch)
                return null;
            var argument = node.Kind is NodeKind.Minimum or NodeKind.Maximum
                ? Polynomial.Sum(known[node.A], known[node.B!], -1)
                : known[node.A];
            return argument is null ? null : Zero(argument);
        }

        return null;
    }

    private static double? Zero(Polynomial line)
        => line.Degree == 1 && line[1, 0] != 0 && double.IsFinite(line[0, 0] / line[1, 0]) ? 0 - line[0, 0] / line[1, 0] : null;

    /// <summary>The formula as a polynomial on one side of a centre (no side: only where nothing switches); null when it is none.</summary>
    private static Polynomial? Expand(FormulaNode[] order, double? center, int side)
    {
        var known = new Dictionary<FormulaNode, Polynomial?>();
        foreach (var node in order)
            known.Add(node, Combine(node, known, center, side));
        return known[order[^1]];
    }

    private static Polynomial? Combine(FormulaNode node, Dictionary<FormulaNode, Polynomial?> known, double? center, int side)
    {
        var a = node.A is null ? null : known[node.A];
        var b = node.B is null ? null : known[node.B];
        switch (node.Kind)
        {
            case NodeKind.Number:
                return double.IsFinite(node.Value) ? Polynomial.Constant(node.Value) : null;
            case NodeKind.X:
                return Polynomial.X;
            case NodeKind.Y:
                return Polynomial.Y;
            case NodeKind.Negate:
                return a?.Scaled(-1);
            case NodeKind.Add:
                return Polynomial.Sum(a, b, 1);
            case NodeKind.Subtract:
                return Polynomial.Sum(a, b, -1);
            case NodeKind.Multiply:
                return Polynomial.Product(a, b);
            case NodeKind.Divide:
                return a is not null && b is { Degree: 0 } && double.IsFinite(1 / b[0, 0]) ? a.Scaled(1 / b[0, 0]) : null;
            case NodeKind.IntegerPower:
                if (a is null || node.Exponent < 0 || node.Exponent * a.Degree > Polynomial.LargestDegree || node.Exponent > 64)
                    return null;
                var power = Polynomial.Constant(1);
                for (var i = 0; i < node.Exponent; i++)
                    power = Polynomial.Product(power, a)!;
                return power;
        }

        if (center is not { } at)
            return null;
        switch (node.Kind)
        {
            case NodeKind.Sqrt:
                return a?.SquareRoot() is { } root && SideOf(root, at, side) is { } rootSign ? root.Scaled(rootSign < 0 ? -1 : 1) : null;
            case NodeKind.Abs:
                return SideOf(a, at, side) is { } sign ? a!.Scaled(sign < 0 ? -1 : 1) : null;
            case NodeKind.Sign:
                return SideOf(a, at, side) is { } value ? Polynomial.Constant(value) : null;
            case NodeKind.Step:
                return SideOf(a, at, side) is { } step ? Polynomial.Constant(step < 0 ? 0 : 1) : null;
            case NodeKind.Minimum:
                return SideOf(Polynomial.Sum(a, b, -1), at, side) is { } lower ? lower < 0 ? a : b : null;
            case NodeKind.Maximum:
                return SideOf(Polynomial.Sum(a, b, -1), at, side) is { } upper ? upper < 0 ? b : a : null;
            case NodeKind.Select:
                return SideOf(a, at, side) is { } branch ? branch < 0 ? b : known[node.C!] : null;
            default:
                return null;
        }
    }

    /// <summary>The sign of a line on one side of a centre; null unless it changes sign there only or never.</summary>
    private static int? SideOf(Polynomial? line, double center, int side)
    {
        if (line is null || line.Degree > 1)
            return null;
        var slope = line[1, 0];
        if (slope == 0)
            return Math.Sign(line[0, 0]);
        var value = line[0, 0] + slope * center;
        if (Math.Abs(value) > Rounding * (Math.Abs(line[0, 0]) + Math.Abs(slope * center)))
            return null;
        return Math.Sign(slope) * side;
    }

    /// <summary>A polynomial in x and y of bounded degree; each coefficient remembers the size of what it was summed from.</summary>
    private sealed class Polynomial
    {
        public const int LargestDegree = 8;
        private const int Side = LargestDegree + 1;

        // Beyond every degree that is asked for: such a polynomial is of no use to anyone.
        private const int Overflowed = 1000;
        private readonly double[] values = new double[Side * Side];
        private readonly double[] sizes = new double[Side * Side];

        public static Polynomial X { get; } = Single(1, 0, 1);

        public static Polynomial Y { get; } = Single(0, 1, 1);

        public int Degree { get; private set; }

        public double this[int powerOfX, int powerOfY] => values[powerOfX * Side + powerOfY];

        public static Polynomial Constant(double value) => Single(0, 0, value);

        public static Polynomial? Sum(Polynomial? a, Polynomial? b, double factor)
        {
            if (a is null || b is null)
                return null;
            var sum = new Polynomial();
            for (var i = 0; i < sum.values.Length; i++)
            {
                sum.values[i] = a.values[i] + factor * b.values[i];
                sum.sizes[i] = a.sizes[i] + b.sizes[i];
            }

            return sum.Settled();
        }

        public static Polynomial? Product(Polynomial? a, Polynomial? b)
        {
            if (a is null || b is null || a.Degree + b.Degree > LargestDegree)
                return null;
            var product = new Polynomial();
            for (var i = 0; i <= a.Degree; i++)
            {
                for (var j = 0; i + j <= a.Degree; j++)
                {
                    if (a[i, j] == 0)
                        continue;
                    for (var k = 0; k <= b.Degree; k++)
                    {
                        for (var l = 0; k + l <= b.Degree; l++)
                        {
                            var index = (i + k) * Side + j + l;
                            product.values[index] += a[i, j] * b[k, l];
                            product.sizes[index] += a.sizes[i * Side + j] * b.sizes[k * Side + l];
                        }
                    }
                }
            }

            return product.Settled();
        }

        public Polynomial Scaled(double factor)
        {
            var scaled = new Polynomial();
            for (var i = 0; i < values.Length; i++)
            {
                scaled.values[i] = factor * values[i];
                scaled.sizes[i] = Math.Abs(factor) * sizes[i];
            }

            return scaled.Settled();
        }

        /// <summary>The line whose square this is, in x alone; null when there is none.</summary>
        public Polynomial? SquareRoot()
        {
            var (c, b, a) = (this[0, 0], this[1, 0], this[2, 0]);
            if (Degree != 2 || !(a > 0) || this[0, 1] != 0 || this[1, 1] != 0 || this[0, 2] != 0 || b * b != 4 * a * c)
                return null;
            return Sum(Single(1, 0, Math.Sqrt(a)), Constant(b / (2 * Math.Sqrt(a))), 1);
        }

        private static Polynomial Single(int powerOfX, int powerOfY, double value)
        {
            var single = new Polynomial();
            single.values[powerOfX * Side + powerOfY] = value;
            single.sizes[powerOfX * Side + powerOfY] = Math.Abs(value);
            return single.Settled();
        }

        private Polynomial Settled()
        {
            Degree = 0;
            for (var i = 0; i < Side; i++)
            {
                for (var j = 0; j < Side; j++)
                {
                    var index = i * Side + j;
                    if (Math.Abs(values[index]) <= Rounding * sizes[index])
                        values[index] = 0;
                    if (!double.IsFinite(values[index]))
                        Degree = Overflowed;
                    else if (values[index] != 0)
                        Degree = Math.Max(Degree, i + j);
                }
            }

            return this;
        }
    }
}
