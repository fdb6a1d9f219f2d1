using SpecialFunctions = MathNet.Numerics.SpecialFunctions;

namespace FlowSolver.Formulas;

/// <summary>Evaluates nodes one point at a time, in the order of their ids. For places where speed does not matter, and where a branch has to be forced.</summary>
internal sealed class FormulaEvaluator
{
    private readonly FormulaNode[] order;
    private readonly int[] slots;
    private readonly double[] values;
    private readonly double[] arguments;

    /// <summary>Prepares the evaluation of <paramref name="outputs"/> and everything below them.</summary>
    public FormulaEvaluator(params ReadOnlySpan<FormulaNode> outputs)
    {
        order = OrderOf(outputs);
        slots = new int[order.Length == 0 ? 0 : order[^1].Id + 1];
        for (var i = 0; i < order.Length; i++)
            slots[order[i].Id] = i;
        values = new double[order.Length];
        arguments = new double[order.Length];
    }

    /// <summary>The nodes below some outputs, children first.</summary>
    public static FormulaNode[] OrderOf(ReadOnlySpan<FormulaNode> outputs)
    {
        var seen = new HashSet<FormulaNode>();
        var open = new Stack<FormulaNode>();
        foreach (var output in outputs)
            open.Push(output);
        while (open.TryPop(out var node))
        {
            if (!seen.Add(node))
                continue;
            if (node.A is not null)
                open.Push(node.A);
            if (node.B is not null)
                open.Push(node.B);
            if (node.C is not null)
                open.Push(node.C);
        }

        var nodes = new FormulaNode[seen.Count];
        seen.CopyTo(nodes);
        Array.Sort(nodes, (a, b) => a.Id.CompareTo(b.Id));
        return nodes;
    }

    /// <summary>The nodes, children first.</summary>
    public IReadOnlyList<FormulaNode> Order => order;

    /// <summary>Evaluates everything at a point; read the results with <see cref="this[FormulaNode]"/>.</summary>
    public void Evaluate(double x, double y)
    {
        for (var i = 0; i < order.Length; i++)
        {
            var node = order[i];
            var a = node.A is null ? 0 : values[slots[node.A.Id]];
            var b = node.B is null ? 0 : values[slots[node.B.Id]];
            var c = node.C is null ? 0 : values[slots[node.C.Id]];
            arguments[i] = Argument(node.Kind, a, b);
            values[i] = Value(node, x, y, a, b, c);
        }
    }

    /// <summary>
    /// Evaluates everything at a point with every switch on the branch that it took at the point evaluated last: the one-sided limit at a kink.
    /// </summary>
    public void EvaluateOnSameBranches(double x, double y)
    {
        for (var i = 0; i < order.Length; i++)
        {
            var node = order[i];
            var a = node.A is null ? 0 : values[slots[node.A.Id]];
            var b = node.B is null ? 0 : values[slots[node.B.Id]];
            var c = node.C is null ? 0 : values[slots[node.C.Id]];
            var side = arguments[i];
            values[i] = node.Kind switch
            {
                NodeKind.Abs => side < 0 ? 0 - a : a, // Not −a: the sign of a zero would turn an infinite slope round.
                NodeKind.Sign => Function(NodeKind.Sign, side),
                NodeKind.Step => Function(NodeKind.Step, side),
                NodeKind.Minimum => side < 0 ? a : b,
                NodeKind.Maximum => side < 0 ? b : a,
                NodeKind.Select => side < 0 ? b : c,
                _ => Value(node, x, y, a, b, c),
            };
        }
    }

    /// <summary>The value found for a node by the last evaluation.</summary>
    public double this[FormulaNode node] => values[slots[node.Id]];

    /// <summary>The argument whose sign decides the branch of a switch: 0 for other nodes.</summary>
    private static double Argument(NodeKind kind, double a, double b) => kind switch
    {
        NodeKind.Abs or NodeKind.Sign or NodeKind.Step or NodeKind.Select => a,
        NodeKind.Minimum or NodeKind.Maximum => a - b,
        _ => 0,
    };

    private static double Value(FormulaNode node, double x, double y, double a, double b, double c) => node.Kind switch
    {
        NodeKind.Number => node.Value,
        NodeKind.X => x,
        NodeKind.Y => y,
        NodeKind.Negate => -a,
        NodeKind.Add => a + b,
        NodeKind.Subtract => a - b,
        NodeKind.Multiply => a * b,
        NodeKind.Divide => a / b,
        NodeKind.IntegerPower => Math.Pow(a, node.Exponent),
        NodeKind.Power => Math.Pow(a, b),
        NodeKind.Minimum => Math.Min(a, b),
        NodeKind.Maximum => Math.Max(a, b),
        NodeKind.Select => a < 0 ? b : c,
        _ => Function(node.Kind, a),
    };

    /// <summary>A function of one argument. sign(0) is 0; step(u) is 0 below 0 and 1 from 0 on.</summary>
    public static double Function(NodeKind function, double u) => function switch
    {
        NodeKind.Exp => Math.Exp(u),
        NodeKind.Log => Math.Log(u),
        NodeKind.Sqrt => Math.Sqrt(u),
        NodeKind.Abs => Math.Abs(u),
        NodeKind.Sin => Math.Sin(u),
        NodeKind.Cos => Math.Cos(u),
        NodeKind.Tan => Math.Tan(u),
        NodeKind.Sinh => Math.Sinh(u),
        NodeKind.Cosh => Math.Cosh(u),
        NodeKind.Tanh => Math.Tanh(u),
        NodeKind.Atan => Math.Atan(u),
        NodeKind.Sign => double.IsNaN(u) ? u : Math.Sign(u),
        NodeKind.Erf => double.IsNaN(u) ? u : SpecialFunctions.Erf(u),
        NodeKind.Step => double.IsNaN(u) ? u : u < 0 ? 0 : 1,
        _ => throw new ArgumentException($"The node was {function}; it must be a function of one argument."),
    };
}
