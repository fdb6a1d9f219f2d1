namespace FlowSolver.Formulas;

/// <summary>
/// Builds expressions as a graph without duplicates: equal subexpressions are one node, within a formula and across its derivatives. Every node is
/// simplified as it is made, from simplified children.
/// </summary>
/// <remarks>
/// Simplification keeps the value at every point where the formula as written is finite, up to rounding. Factors are gathered only when they are
/// moderate (between 2⁻⁴⁰ and 2⁴⁰), so that no product overflows or underflows that did not before, except within a factor 2⁴⁰ of the limits of
/// a double. Where the formula as written is not finite the simplified one may be: 0·u is 0, u − u is 0, log(exp(u)) is u.
/// </remarks>
internal sealed class FormulaGraph
{
    private const int LargestExponent = 65536;
    private const double LeastFactor = 1.0 / (1L << 40);
    private const double LargestFactor = 1L << 40;

    private readonly Dictionary<(NodeKind, int, int, int, long), FormulaNode> known = [];
    private readonly List<FormulaNode> nodes = [];

    public FormulaGraph()
    {
        X = Make(NodeKind.X);
        Y = Make(NodeKind.Y);
        Zero = Number(0);
        One = Number(1);
    }

    public FormulaNode X { get; }

    public FormulaNode Y { get; }

    public FormulaNode Zero { get; }

    public FormulaNode One { get; }

    public int Count => nodes.Count;

    public FormulaNode Number(double value)
    {
        // −0 and the many NaNs would make equal numbers look different.
        value = value == 0 ? 0 : double.IsNaN(value) ? double.NaN : value;
        return Make(NodeKind.Number, payload: BitConverter.DoubleToInt64Bits(value));
    }

    public FormulaNode Negate(FormulaNode a) => a.Kind switch
    {
        NodeKind.Number => Number(-a.Value),
        NodeKind.Negate => a.A!,
        NodeKind.Subtract => Subtract(a.B!, a.A!),
        NodeKind.Multiply when a.A!.IsNumber => Multiply(Number(-a.A.Value), a.B!),
        _ => Make(NodeKind.Negate, a),
    };

    public FormulaNode Add(FormulaNode a, FormulaNode b)
    {
        if (a.IsNumber && b.IsNumber)
            return Number(a.Value + b.Value);
        if (a == Zero)
            return b;
        if (b == Zero)
            return a;
        if (b.Kind == NodeKind.Negate)
            return Subtract(a, b.A!);
        if (a.Kind == NodeKind.Negate)
            return Subtract(b, a.A!);
        var (factorA, termA) = Split(a);
        var (factorB, termB) = Split(b);
        if (termA == termB)
            return Scale(Sum(factorA, factorB), termA);
        return a.Id <= b.Id ? Make(NodeKind.Add, a, b) : Make(NodeKind.Add, b, a);
    }

    public FormulaNode Subtract(FormulaNode a, FormulaNode b)
    {
        if (a.IsNumber && b.IsNumber)
            return Number(a.Value - b.Value);
        if (a == Zero)
            return Negate(b);
        if (b == Zero)
            return a;
        if (b.Kind == NodeKind.Negate)
            return Add(a, b.A!);
        var (factorA, termA) = Split(a);
        var (factorB, termB) = Split(b);
        return termA == termB ? Scale(Sum(factorA, -factorB), termA) : Make(NodeKind.Subtract, a, b);
    }

    public FormulaNode Multiply(FormulaNode a, FormulaNode b)
    {
        if (b.IsNumber)
            (a, b) = (b, a);
        if (a.IsNumber)
            return MultiplyByNumber(a, b);
        if (b.Kind == NodeKind.Divide && b.A == One)
            return Divide(a, b.B!);
        if (a.Kind == NodeKind.Divide && a.A == One)
            return Divide(b, a.B!);
        var (factorA, termA) = SplitModerate(a);
        var (factorB, termB) = SplitModerate(b);
        var factor = factorA * factorB;
        if (factor != 1 && IsModerate(factor))
            return Scale(factor, Multiply(termA, termB));
        var (baseA, exponentA) = SplitPower(a);
        var (baseB, exponentB) = SplitPower(b);
        if (baseA == baseB && exponentA + exponentB <= LargestExponent)
            return IntegerPower(baseA, exponentA + exponentB);
        return a.Id <= b.Id ? Make(NodeKind.Multiply, a, b) : Make(NodeKind.Multiply, b, a);
    }

    public FormulaNode Divide(FormulaNode a, FormulaNode b)
    {
        if (a.IsNumber && b.IsNumber)
            return Number(a.Value / b.Value);
        if (a == Zero || b == One)
            return a;
        if (b.IsNumber && double.IsNormal(b.Value) && double.IsNormal(1 / b.Value))
            return Multiply(Number(1 / b.Value), a);
        if (a.Kind == NodeKind.Sinh && b.Kind == NodeKind.Cosh && a.A == b.A)
            return Apply(NodeKind.Tanh, a.A!);
        var (factorA, termA) = a.IsNumber ? (1, a) : SplitModerate(a);
        var (factorB, termB) = SplitModerate(b);
        var factor = factorA / factorB;
        if ((factorA != 1 || factorB != 1) && IsModerate(factor))
            return Scale(factor, Divide(termA, termB));
        return Make(NodeKind.Divide, a, b);
    }

    public FormulaNode Power(FormulaNode a, FormulaNode b)
    {
        if (a.IsNumber && b.IsNumber)
            return Number(Math.Pow(a.Value, b.Value));
        if (a.IsNumber && a.Value == Math.E)
            return Apply(NodeKind.Exp, b);
        if (!b.IsNumber)
            return a == One ? One : Make(NodeKind.Power, a, b);
        var exponent = b.Value;
        if (exponent == Math.Floor(exponent) && Math.Abs(exponent) <= LargestExponent)
            return IntegerPower(a, (int)exponent);
        if (exponent == 0.5)
            return Apply(NodeKind.Sqrt, a);
        if (a.Kind == NodeKind.Exp)
            return Apply(NodeKind.Exp, Multiply(b, a.A!));
        // (t^2k)^c is |t|^(2kc): keeps what the even power has already made positive, without its overflow.
        if (a.Kind == NodeKind.IntegerPower && a.Exponent % 2 == 0)
            return Power(Apply(NodeKind.Abs, a.A!), Number(a.Exponent * exponent));
        return Make(NodeKind.Power, a, b);
    }

    public FormulaNode IntegerPower(FormulaNode a, int exponent)
    {
        if (exponent == 0)
            return One;
        if (exponent == 1)
            return a;
        var isEven = exponent % 2 == 0;
        switch (a.Kind)
        {
            case NodeKind.Number:
                return Number(Math.Pow(a.Value, exponent));
            case NodeKind.Negate:
                return isEven ? IntegerPower(a.A!, exponent) : Negate(IntegerPower(a.A!, exponent));
            case NodeKind.Abs when isEven:
                return IntegerPower(a.A!, exponent);
            case NodeKind.IntegerPower when Math.Abs((long)a.Exponent * exponent) <= LargestExponent:
                return IntegerPower(a.A!, a.Exponent * exponent);
            case NodeKind.Multiply when a.A!.IsNumber && IsModerate(Math.Pow(a.A.Value, exponent)):
                return Scale(Math.Pow(a.A.Value, exponent), IntegerPower(a.B!, exponent));
        }

        return Make(NodeKind.IntegerPower, a, payload: exponent);
    }

    public FormulaNode Minimum(FormulaNode a, FormulaNode b)
    {
        if (a == b)
            return a;
        if (a.IsNumber && b.IsNumber)
            return Number(Math.Min(a.Value, b.Value));
        return a.Id <= b.Id ? Make(NodeKind.Minimum, a, b) : Make(NodeKind.Minimum, b, a);
    }

    public FormulaNode Maximum(FormulaNode a, FormulaNode b)
    {
        if (a == b)
            return a;
        if (a.IsNumber && b.IsNumber)
            return Number(Math.Max(a.Value, b.Value));
        if (a == Zero && b.IsNotNegative)
            return b;
        if (b == Zero && a.IsNotNegative)
            return a;
        return a.Id <= b.Id ? Make(NodeKind.Maximum, a, b) : Make(NodeKind.Maximum, b, a);
    }

    public FormulaNode Select(FormulaNode condition, FormulaNode below, FormulaNode otherwise)
    {
        if (below == otherwise)
            return below;
        if (condition.IsNumber)
            return condition.Value < 0 ? below : otherwise;
        if (condition.IsNotNegative)
            return otherwise;
        if (condition.Kind == NodeKind.Multiply && condition.A!.IsNumber && condition.A.Value > 0)
            condition = condition.B!;
        return Make(NodeKind.Select, condition, below, otherwise);
    }

    /// <summary>A function of one argument.</summary>
    public FormulaNode Apply(NodeKind function, FormulaNode a)
    {
        if (a.IsNumber)
            return Number(FormulaEvaluator.Function(function, a.Value));
        var isNegated = a.Kind == NodeKind.Negate || (a.Kind == NodeKind.Multiply && a.A!.IsNumber && a.A.Value < 0);
        switch (function)
        {
            case NodeKind.Abs when a.IsNotNegative:
                return a;
            case NodeKind.Abs when a.Kind == NodeKind.Multiply && a.A!.IsNumber:
                return Scale(Math.Abs(a.A.Value), Apply(NodeKind.Abs, a.B!));
            case NodeKind.Abs or NodeKind.Cos or NodeKind.Cosh when isNegated:
                return Apply(function, Negate(a));
            case NodeKind.Sin or NodeKind.Tan or NodeKind.Sinh or NodeKind.Tanh or NodeKind.Atan or NodeKind.Erf or NodeKind.Sign when isNegated:
                return Negate(Apply(function, Negate(a)));
            case NodeKind.Sign or NodeKind.Step when a.Kind == NodeKind.Multiply && a.A!.IsNumber && a.A.Value > 0:
                return Apply(function, a.B!);
            case NodeKind.Log when a.Kind == NodeKind.Exp:
                return a.A!;
            case NodeKind.Sqrt when a.Kind == NodeKind.IntegerPower && a.Exponent % 2 == 0:
                return IntegerPower(Apply(NodeKind.Abs, a.A!), a.Exponent / 2);
            case NodeKind.Sqrt when a.Kind == NodeKind.Exp:
                return Apply(NodeKind.Exp, Multiply(Number(0.5), a.A!));
        }

        return Make(function, a);
    }

    private FormulaNode MultiplyByNumber(FormulaNode number, FormulaNode b)
    {
        var factor = number.Value;
        if (b.IsNumber)
            return Number(factor * b.Value);
        if (factor == 0)
            return Zero;
        if (factor == 1)
            return b;
        if (b.Kind == NodeKind.Negate)
            return MultiplyByNumber(Number(-factor), b.A!);
        if (factor == -1)
            return b.Kind == NodeKind.Multiply && b.A!.IsNumber ? Scale(-b.A.Value, b.B!) : Negate(b);
        if (b.Kind == NodeKind.Multiply && b.A!.IsNumber && double.IsNormal(factor * b.A.Value))
            return Scale(factor * b.A.Value, b.B!);
        if (b.Kind == NodeKind.Divide && b.A!.IsNumber && double.IsNormal(factor * b.A.Value))
            return Divide(Number(factor * b.A.Value), b.B!);
        return Make(NodeKind.Multiply, number, b);
    }

    /// <summary>The sum of two factors of one term; 0 when only the rounding of the decimals they were written in is left, as in 0.1 + 0.2 − 0.3.</summary>
    private static double Sum(double a, double b)
    {
        var sum = a + b;
        return Math.Abs(sum) <= 4.5e-16 * Math.Max(Math.Abs(a), Math.Abs(b)) ? 0 : sum;
    }

    private FormulaNode Scale(double factor, FormulaNode term) => Multiply(Number(factor), term);

    /// <summary>A node as factor times term.</summary>
    private static (double Factor, FormulaNode Term) Split(FormulaNode node) => node.Kind switch
    {
        NodeKind.Negate => (-1, node.A!),
        NodeKind.Multiply when node.A!.IsNumber => (node.A.Value, node.B!),
        _ => (1, node),
    };

    private static (double Factor, FormulaNode Term) SplitModerate(FormulaNode node)
    {
        var split = Split(node);
        return IsModerate(split.Factor) ? split : (1, node);
    }

    private static (FormulaNode Base, int Exponent) SplitPower(FormulaNode node)
        => node.Kind == NodeKind.IntegerPower && node.Exponent > 0 ? (node.A!, node.Exponent) : (node, 1);

    private static bool IsModerate(double factor) => Math.Abs(factor) is >= LeastFactor and <= LargestFactor;

    private FormulaNode Make(NodeKind kind, FormulaNode? a = null, FormulaNode? b = null, FormulaNode? c = null, long payload = 0)
    {
        var key = (kind, a?.Id ?? -1, b?.Id ?? -1, c?.Id ?? -1, payload);
        if (known.TryGetValue(key, out var node))
            return node;
        var value = kind == NodeKind.Number ? BitConverter.Int64BitsToDouble(payload) : 0;
        var isSwitch = kind is NodeKind.Minimum or NodeKind.Maximum or NodeKind.Select or NodeKind.Abs or NodeKind.Sign or NodeKind.Step;
        node = new FormulaNode
        {
            Id = nodes.Count,
            Kind = kind,
            A = a,
            B = b,
            C = c,
            Value = value,
            Exponent = kind == NodeKind.IntegerPower ? (int)payload : 0,
            IsNotNegative = NeverNegative(kind, a, b, c, value, (int)payload),
            HasSwitch = isSwitch || (a?.HasSwitch ?? false) || (b?.HasSwitch ?? false) || (c?.HasSwitch ?? false),
        };
        known.Add(key, node);
        nodes.Add(node);
        return node;
    }

    private static bool NeverNegative(NodeKind kind, FormulaNode? a, FormulaNode? b, FormulaNode? c, double value, int exponent) => kind switch
    {
        NodeKind.Number => value >= 0,
        NodeKind.IntegerPower => exponent % 2 == 0 || a!.IsNotNegative,
        NodeKind.Exp or NodeKind.Sqrt or NodeKind.Abs or NodeKind.Cosh or NodeKind.Step => true,
        NodeKind.Power or NodeKind.Tanh or NodeKind.Sinh or NodeKind.Atan or NodeKind.Erf or NodeKind.Sign => a!.IsNotNegative,
        NodeKind.Add or NodeKind.Multiply or NodeKind.Divide or NodeKind.Minimum => a!.IsNotNegative && b!.IsNotNegative,
        NodeKind.Maximum => a!.IsNotNegative || b!.IsNotNegative,
        NodeKind.Select => b!.IsNotNegative && c!.IsNotNegative,
        _ => false,
    };
}
