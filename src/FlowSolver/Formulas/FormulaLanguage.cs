namespace FlowSolver.Formulas;

/// <summary>The words that a formula may use, and its limits. The reader of formulas works from these tables, so that a reference page can be made from them.</summary>
public static class FormulaLanguage
{
    /// <summary>Longest formula, in characters.</summary>
    public const int LongestText = 2000;

    /// <summary>Deepest nesting of parentheses, functions, powers and signs.</summary>
    public const int DeepestNesting = 64;

    /// <summary>Most distinct operations that the formula and its derivatives may come to together.</summary>
    public const int MostOperations = 20000;

    /// <summary>A function of the language.</summary>
    /// <param name="Name">How it is written.</param>
    /// <param name="Arguments">1 or 2.</param>
    /// <param name="Meaning">One line for the reader.</param>
    public sealed record FunctionEntry(string Name, int Arguments, string Meaning)
    {
        internal NodeKind Kind { get; init; }
    }

    /// <summary>All functions.</summary>
    public static IReadOnlyList<FunctionEntry> Functions { get; } =
    [
        new("exp", 1, "e to the power u") { Kind = NodeKind.Exp },
        new("log", 1, "natural logarithm of u, for u > 0") { Kind = NodeKind.Log },
        new("sqrt", 1, "square root of u, for u >= 0") { Kind = NodeKind.Sqrt },
        new("abs", 1, "u without its sign; a kink where u changes sign") { Kind = NodeKind.Abs },
        new("sin", 1, "sine of u in radians") { Kind = NodeKind.Sin },
        new("cos", 1, "cosine of u in radians") { Kind = NodeKind.Cos },
        new("tan", 1, "tangent of u in radians") { Kind = NodeKind.Tan },
        new("sinh", 1, "hyperbolic sine of u") { Kind = NodeKind.Sinh },
        new("cosh", 1, "hyperbolic cosine of u") { Kind = NodeKind.Cosh },
        new("tanh", 1, "hyperbolic tangent of u") { Kind = NodeKind.Tanh },
        new("atan", 1, "arc tangent of u, between -pi/2 and pi/2") { Kind = NodeKind.Atan },
        new("min", 2, "the smaller of u and v; a kink where they cross") { Kind = NodeKind.Minimum },
        new("max", 2, "the larger of u and v; a kink where they cross") { Kind = NodeKind.Maximum },
        new("sign", 1, "-1, 0 or 1 for u below, at or above 0; a jump") { Kind = NodeKind.Sign },
        new("erf", 1, "error function of u, 2/sqrt(pi) times the integral of exp(-s^2) from 0 to u") { Kind = NodeKind.Erf },
        new("step", 1, "0 for u < 0 and 1 for u >= 0; a jump") { Kind = NodeKind.Step },
    ];

    /// <summary>Names with a fixed meaning besides the functions: the variables and the two numbers.</summary>
    public static IReadOnlyList<string> FixedNames { get; } = ["x", "y", "pi", "e"];

    /// <summary>What people write elsewhere, and how it is written here.</summary>
    internal static readonly Dictionary<string, string> Elsewhere = new(StringComparer.OrdinalIgnoreCase)
    {
        ["ln"] = "log",
        ["log10"] = "log(u)/log(10)",
        ["log2"] = "log(u)/log(2)",
        ["pow"] = "u^v",
        ["power"] = "u^v",
        ["fabs"] = "abs",
        ["sgn"] = "sign",
        ["signum"] = "sign",
        ["heaviside"] = "step",
        ["theta"] = "step",
        ["arctan"] = "atan",
        ["cot"] = "1/tan(u)",
        ["sec"] = "1/cos(u)",
        ["sech"] = "1/cosh(u)",
        ["coth"] = "1/tanh(u)",
        ["erfc"] = "1 - erf(u)",
        ["cbrt"] = "sign(u)*abs(u)^(1/3)",
        ["square"] = "u^2",
    };

    /// <summary>Whether a name may be given to a constant: a letter or underscore, then letters, digits and underscores, and not a word of the language.</summary>
    public static bool IsConstantName(string name)
    {
        if (string.IsNullOrEmpty(name) || !IsNameStart(name[0]))
            return false;
        foreach (var character in name)
        {
            if (!IsNamePart(character))
                return false;
        }

        return !IsReserved(name);
    }

    /// <summary>Whether a name is a word of the language.</summary>
    public static bool IsReserved(string name) => FixedNames.Contains(name) || FindFunction(name) is not null;

    internal static FunctionEntry? FindFunction(string name)
    {
        foreach (var entry in Functions)
        {
            if (entry.Name == name)
                return entry;
        }

        return null;
    }

    internal static bool IsNameStart(char character) => char.IsLetter(character) || character == '_';

    internal static bool IsNamePart(char character) => char.IsLetterOrDigit(character) || character == '_';
}
