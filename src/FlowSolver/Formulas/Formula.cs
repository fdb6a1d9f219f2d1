using System.Globalization;
using FlowSolver.Foundation;

namespace FlowSolver.Formulas;

/// <summary>Constant + g·x + ½ xᵀHx, in one or two variables (the y parts are 0 in one).</summary>
public sealed record QuadraticStructure(
    double Constant, double GradientX, double GradientY, double HessianXX, double HessianXY, double HessianYY);

/// <summary>Constant + Slope·|x − Center| in one variable, Slope &gt; 0.</summary>
public sealed record AbsoluteValueStructure(double Constant, double Slope, double Center);

/// <summary>The variable by which a formula is differentiated.</summary>
public enum FormulaVariable
{
    /// <summary>The first coordinate.</summary>
    X,

    /// <summary>The second coordinate.</summary>
    Y,
}

/// <summary>
/// A scalar function of x (and y) read from text, with exact derivatives. Immutable and safe to use from several threads.
/// </summary>
/// <remarks>
/// The language stands in <see cref="FormulaLanguage"/>. Powers bind right and tighter than the minus sign: −x^2 is −(x²). A power with a whole
/// exponent is a product; with another exponent its base must be ≥ 0. Evaluation never throws: where a formula is not defined it is NaN or infinite.
/// </remarks>
public sealed class Formula
{
    private readonly FormulaGraph graph;
    private readonly Lazy<FormulaKernel> kernel;
    private readonly Lazy<PolynomialStructure> structure;

    private Formula(string text, int dimension, FormulaGraph graph, FormulaNode root, IReadOnlySet<string> constants)
    {
        Constants = constants;
        Text = text;
        Dimension = dimension;
        this.graph = graph;
        Root = root;
        kernel = new Lazy<FormulaKernel>(() => new FormulaKernel(Root));
        structure = new Lazy<PolynomialStructure>(() => new PolynomialStructure(Root, Dimension));
    }

    /// <summary>Reads a formula.</summary>
    /// <param name="text">The formula, at most <see cref="FormulaLanguage.LongestText"/> characters.</param>
    /// <param name="dimension">1 when only x may be used, 2 when y may be as well.</param>
    /// <param name="constants">Names with values, in units of the reader's choice; null when there are none.</param>
    /// <exception cref="InputException">The text is not a formula; the fault carries it with a caret under the place.</exception>
    /// <exception cref="ArgumentException">The dimension is neither 1 nor 2, or a constant's name or value is not allowed.</exception>
    public static Formula Parse(string text, int dimension, IReadOnlyDictionary<string, double>? constants = null)
    {
        ArgumentNullException.ThrowIfNull(text);
        Require.That(dimension is 1 or 2, $"The dimension was {dimension}; it must be 1 or 2.");
        constants ??= new Dictionary<string, double>();
        foreach (var (name, value) in constants)
        {
            Require.That(FormulaLanguage.IsConstantName(name),
                $"The constant's name was \"{name}\"; it must be a letter, then letters, digits or underscores, and not a word of the language.");
            Require.Finite(value, name);
        }

        var graph = new FormulaGraph();
        var used = new HashSet<string>();
        var root = FormulaParser.Parse(text, dimension, constants, graph, used);
        return new Formula(text, dimension, graph, root, used);
    }

    /// <summary>The formula as written.</summary>
    public string Text { get; }

    /// <summary>1 or 2.</summary>
    public int Dimension { get; }

    /// <summary>Names of the constants that the text calls.</summary>
    public IReadOnlySet<string> Constants { get; }

    /// <summary>
    /// Whether nothing in it switches (abs, min, max, sign, step) once it is simplified. Where this is false the formula may still be smooth, but that
    /// is not known from its text alone.
    /// </summary>
    public bool IsSmooth => !Root.HasSwitch;

    /// <summary>Whether y occurs in it once it is simplified.</summary>
    public bool UsesY => FormulaEvaluator.OrderOf([Root]).Contains(graph.Y);

    /// <summary>Evaluates the formula at many points. Compiled at the first call; a call allocates nothing.</summary>
    public void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
    {
        if (Dimension == 2)
            Require.Length(y.Length, x.Length);
        kernel.Value.Run(x, y, value);
    }

    /// <summary>The value at one point, for places where speed does not matter.</summary>
    public double ValueAt(double x, double y = 0)
    {
        var evaluator = new FormulaEvaluator(Root);
        evaluator.Evaluate(x, y);
        return evaluator[Root];
    }

    /// <summary>
    /// The exact derivative by a variable, as a formula of its own. At a kink it is that of one side; the jumps of step and sign do not count.
    /// </summary>
    public Formula Derivative(FormulaVariable variable)
        => new($"d/d{(variable == FormulaVariable.X ? "x" : "y")} [{Text}]", Dimension, graph, DerivativeNode(Root, variable == FormulaVariable.Y), Constants);

    /// <summary>Its value when it is a constant; null otherwise.</summary>
    public double? AsConstant() => Root.IsNumber ? Root.Value : structure.Value.Quadratic is { GradientX: 0, GradientY: 0, HessianXX: 0, HessianXY: 0, HessianYY: 0 } constant ? constant.Constant : null;

    /// <summary>Its coefficients when it is a polynomial of degree at most 2, however it is written; null otherwise.</summary>
    public QuadraticStructure? AsQuadratic() => structure.Value.Quadratic;

    /// <summary>Its parameters when it is c + a·|x − x₀| with a &gt; 0 in one variable, however it is written; null otherwise.</summary>
    public AbsoluteValueStructure? AsAbsoluteValue() => structure.Value.AbsoluteValue;

    /// <inheritdoc/>
    public override string ToString() => Text;

    internal FormulaNode Root { get; }

    /// <summary>∂node/∂x or ∂node/∂y in this formula's graph.</summary>
    internal FormulaNode DerivativeNode(FormulaNode node, bool byY)
    {
        // The graph grows with derivatives; whoever asks first makes them.
        lock (graph)
        {
            derivatives ??= new FormulaDerivatives(graph);
            var derivative = derivatives.Of(node, byY);
            if (graph.Count > FormulaLanguage.MostOperations)
            {
                throw new InputException(new InputFault(string.Create(
                    CultureInfo.InvariantCulture,
                    $"The formula and its derivatives came to {graph.Count} operations; they must be at most {FormulaLanguage.MostOperations}."),
                    "Simplify the formula."));
            }

            return derivative;
        }
    }

    private FormulaDerivatives? derivatives;

    /// <summary>The difference of two nodes, in this formula's graph.</summary>
    internal FormulaNode DifferenceNode(FormulaNode a, FormulaNode b)
    {
        lock (graph)
            return graph.Subtract(a, b);
    }
}
