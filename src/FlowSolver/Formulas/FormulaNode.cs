namespace FlowSolver.Formulas;

/// <summary>What a node of a formula's graph does with its children.</summary>
internal enum NodeKind
{
    Number,
    X,
    Y,
    Negate,
    Add,
    Subtract,
    Multiply,
    Divide,

    /// <summary>A^Exponent with a whole exponent other than 0 and 1.</summary>
    IntegerPower,

    /// <summary>A^B.</summary>
    Power,
    Minimum,
    Maximum,

    /// <summary>B where A &lt; 0, else C. Only derivatives bring it in.</summary>
    Select,
    Exp,
    Log,
    Sqrt,
    Abs,
    Sin,
    Cos,
    Tan,
    Sinh,
    Cosh,
    Tanh,
    Atan,
    Sign,
    Erf,
    Step,
}

/// <summary>
/// One node of a formula's graph: immutable, made by a <see cref="FormulaGraph"/> only, which never makes two equal ones. Children have smaller
/// <see cref="Id"/>s than their parents, so that the order of ids is an order of evaluation and nothing needs recursion.
/// </summary>
internal sealed class FormulaNode
{
    public required int Id { get; init; }

    public required NodeKind Kind { get; init; }

    public FormulaNode? A { get; init; }

    public FormulaNode? B { get; init; }

    public FormulaNode? C { get; init; }

    /// <summary>Value of a number.</summary>
    public double Value { get; init; }

    /// <summary>Exponent of a whole power.</summary>
    public int Exponent { get; init; }

    /// <summary>Whether the value is known to be ≥ 0 (or NaN) everywhere.</summary>
    public bool IsNotNegative { get; init; }

    /// <summary>Whether the node or anything below it switches between branches.</summary>
    public bool HasSwitch { get; init; }

    public bool IsNumber => Kind == NodeKind.Number;

    public bool IsSwitch => Kind is NodeKind.Minimum or NodeKind.Maximum or NodeKind.Select or NodeKind.Abs or NodeKind.Sign or NodeKind.Step;
}
