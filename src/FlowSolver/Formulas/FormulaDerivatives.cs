namespace FlowSolver.Formulas;

/// <summary>Exact derivatives of nodes as nodes of the same graph, each made once however often it is asked for.</summary>
internal sealed class FormulaDerivatives(FormulaGraph graph)
{
    private readonly Dictionary<(int Node, bool ByY), FormulaNode> known = [];

    /// <summary>
    /// ∂node/∂x or ∂node/∂y. At a kink it is the derivative of one side; the jump of <c>step</c> and <c>sign</c> has derivative 0 on both sides, and
    /// the measure that sits on the jump itself is not part of it.
    /// </summary>
    public FormulaNode Of(FormulaNode node, bool byY)
    {
        foreach (var below in FormulaEvaluator.OrderOf([node]))
        {
            if (!known.ContainsKey((below.Id, byY)))
                known.Add((below.Id, byY), Differentiate(below, byY));
        }

        return known[(node.Id, byY)];
    }

    private FormulaNode Differentiate(FormulaNode node, bool byY)
    {
        if (node.A is null)
            return node.Kind == (byY ? NodeKind.Y : NodeKind.X) ? graph.One : graph.Zero;
        var a = node.A;
        var da = known[(a.Id, byY)];
        // cosh^-n, the tail of tanh: n·cosh^-(n+1)·sinh would be 0·∞ where cosh overflows; n·cosh^-n·tanh is the same and stays finite.
        if (node.Kind == NodeKind.IntegerPower && node.Exponent < 0 && a.Kind == NodeKind.Cosh)
        {
            var inner = graph.Multiply(graph.Apply(NodeKind.Tanh, a.A!), known[(a.A!.Id, byY)]);
            return graph.Multiply(graph.Multiply(graph.Number(node.Exponent), node), inner);
        }

        if (node.B is null)
            return da == graph.Zero ? da : graph.Multiply(Outer(node, a), da);
        var b = node.B;
        var db = known[(b.Id, byY)];
        return node.Kind switch
        {
            NodeKind.Add => graph.Add(da, db),
            NodeKind.Subtract => graph.Subtract(da, db),
            NodeKind.Multiply => graph.Add(graph.Multiply(da, b), graph.Multiply(a, db)),
            // With the quotient itself: no square of the denominator that could overflow.
            NodeKind.Divide => graph.Divide(graph.Subtract(da, graph.Multiply(node, db)), b),
            NodeKind.Power => Power(node, a, b, da, db),
            NodeKind.Minimum => graph.Select(graph.Subtract(a, b), da, db),
            NodeKind.Maximum => graph.Select(graph.Subtract(a, b), db, da),
            NodeKind.Select => graph.Select(a, db, known[(node.C!.Id, byY)]),
            _ => throw new InvalidOperationException($"The node {node.Kind} has no derivative rule."),
        };
    }

    private FormulaNode Power(FormulaNode node, FormulaNode a, FormulaNode b, FormulaNode da, FormulaNode db)
    {
        var byBase = da == graph.Zero
            ? graph.Zero
            : b.IsNumber
                ? graph.Multiply(graph.Multiply(b, graph.Power(a, graph.Number(b.Value - 1))), da)
                : graph.Multiply(node, graph.Divide(graph.Multiply(b, da), a));
        var byExponent = db == graph.Zero ? graph.Zero : graph.Multiply(graph.Multiply(node, graph.Apply(NodeKind.Log, a)), db);
        return graph.Add(byBase, byExponent);
    }

    /// <summary>The derivative of a function of one argument by that argument.</summary>
    private FormulaNode Outer(FormulaNode node, FormulaNode a) => node.Kind switch
    {
        NodeKind.Negate => graph.Number(-1),
        NodeKind.IntegerPower => graph.Multiply(graph.Number(node.Exponent), graph.IntegerPower(a, node.Exponent - 1)),
        NodeKind.Exp => node,
        NodeKind.Log => graph.Divide(graph.One, a),
        NodeKind.Sqrt => graph.Divide(graph.Number(0.5), node),
        NodeKind.Abs => graph.Select(a, graph.Number(-1), graph.One),
        NodeKind.Sin => graph.Apply(NodeKind.Cos, a),
        NodeKind.Cos => graph.Negate(graph.Apply(NodeKind.Sin, a)),
        NodeKind.Tan => graph.Add(graph.One, graph.IntegerPower(node, 2)),
        NodeKind.Sinh => graph.Apply(NodeKind.Cosh, a),
        NodeKind.Cosh => graph.Apply(NodeKind.Sinh, a),
        // Not 1 − tanh²: that has no correct digit left far out.
        NodeKind.Tanh => graph.IntegerPower(graph.Apply(NodeKind.Cosh, a), -2),
        NodeKind.Atan => graph.Divide(graph.One, graph.Add(graph.One, graph.IntegerPower(a, 2))),
        NodeKind.Erf => graph.Multiply(
            graph.Number(2 / Math.Sqrt(Math.PI)), graph.Apply(NodeKind.Exp, graph.Negate(graph.IntegerPower(a, 2)))),
        NodeKind.Sign or NodeKind.Step => graph.Zero,
        _ => throw new InvalidOperationException($"The node {node.Kind} has no derivative rule."),
    };
}
