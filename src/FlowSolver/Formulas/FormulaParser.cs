using System.Globalization;
using System.Text;
using FlowSolver.Foundation;

namespace FlowSolver.Formulas;

/// <summary>
/// Reads a formula by recursive descent:
/// <code>
/// sum      = product { ("+" | "-") product }
/// product  = signed { ("*" | "/") signed }
/// signed   = "-" signed | power
/// power    = atom [ "^" exponent ]
/// exponent = "-" exponent | power
/// atom     = number | name | function "(" sum { "," sum } ")" | "(" sum ")"
/// </code>
/// so that ^ binds right and tighter than the minus sign: −x^2 is −(x²), 2^−3^2 is 2^(−(3²)).
/// </summary>
internal sealed class FormulaParser
{
    private readonly string text;
    private readonly int dimension;
    private readonly IReadOnlyDictionary<string, double> constants;
    private readonly FormulaGraph graph;
    private readonly HashSet<string> used;
    private int position;
    private int depth;

    private FormulaParser(string text, int dimension, IReadOnlyDictionary<string, double> constants, FormulaGraph graph, HashSet<string> used)
    {
        this.used = used;
        this.text = text;
        this.dimension = dimension;
        this.constants = constants;
        this.graph = graph;
    }

    /// <param name="text">The formula.</param>
    /// <param name="dimension">1 or 2.</param>
    /// <param name="constants">Names with values.</param>
    /// <param name="graph">Receives the nodes.</param>
    /// <param name="used">Receives the names of the constants that occur.</param>
    /// <exception cref="InputException">The text is not a formula.</exception>
    public static FormulaNode Parse(string text, int dimension, IReadOnlyDictionary<string, double> constants, FormulaGraph graph, HashSet<string> used)
    {
        if (text.Length > FormulaLanguage.LongestText)
        {
            throw new InputException(new InputFault(
                string.Create(CultureInfo.InvariantCulture, $"The formula had {text.Length} characters; it must have at most {FormulaLanguage.LongestText}."),
                "Shorten it, for example with constants."));
        }

        var parser = new FormulaParser(text, dimension, constants, graph, used);
        parser.SkipSpace();
        if (parser.position == text.Length)
            throw parser.Fault(0, "The formula was empty; it must be an expression such as x^2/2.");
        var node = parser.Sum();
        if (parser.position < text.Length)
            throw parser.Unexpected();
        return node;
    }

    private FormulaNode Sum()
    {
        var left = Product();
        while (true)
        {
            if (Take('+'))
                left = graph.Add(left, Product());
            else if (Take('-'))
                left = graph.Subtract(left, Product());
            else
                return left;
        }
    }

    private FormulaNode Product()
    {
        var left = Signed();
        while (true)
        {
            if (Take('*'))
                left = graph.Multiply(left, Signed());
            else if (Take('/'))
                left = graph.Divide(left, Signed());
            else
                return left;
        }
    }

    private FormulaNode Signed()
    {
        if (Peek() != '-')
            return Power();
        Enter();
        Take('-');
        var node = graph.Negate(Signed());
        depth--;
        return node;
    }

    private FormulaNode Power()
    {
        var start = Atom();
        if (!Take('^'))
            return start;
        Enter();
        var node = graph.Power(start, Exponent());
        depth--;
        return node;
    }

    private FormulaNode Exponent()
    {
        if (Peek() != '-')
            return Power();
        Enter();
        Take('-');
        var node = graph.Negate(Exponent());
        depth--;
        return node;
    }

    private FormulaNode Atom()
    {
        var character = Peek();
        if (char.IsAsciiDigit(character) || character == '.')
            return Number();
        if (FormulaLanguage.IsNameStart(character))
            return Name();
        if (character != '(')
            throw MissingOperand();
        Enter();
        var open = position;
        Take('(');
        if (Peek() == ')')
            throw Fault(position, "The parentheses held nothing; they must hold an expression.");
        var node = Sum();
        Close(open, "parenthesis");
        depth--;
        return node;
    }

    private FormulaNode Number()
    {
        var start = position;
        var end = start;
        while (end < text.Length && char.IsAsciiDigit(text[end]))
            end++;
        if (end < text.Length && text[end] == '.')
        {
            end++;
            while (end < text.Length && char.IsAsciiDigit(text[end]))
                end++;
        }

        if (end - start == 1 && text[start] == '.')
            throw Fault(start, "A point stood without digits; a number must have digits, such as 0.5.");
        if (end < text.Length && text[end] is 'e' or 'E')
        {
            var digits = end + 1;
            if (digits < text.Length && text[digits] is '+' or '-')
                digits++;
            if (digits < text.Length && char.IsAsciiDigit(text[digits]))
            {
                end = digits;
                while (end < text.Length && char.IsAsciiDigit(text[end]))
                    end++;
            }
            else if (end + 1 == text.Length || !FormulaLanguage.IsNamePart(text[end + 1]))
            {
                throw Fault(end, $"The exponent of {text[start..end]} had no digits; it must be written as in {text[start..end]}e-3.",
                    $"To multiply by the number e write {text[start..end]}*e.");
            }
        }

        if (end < text.Length && text[end] == '.')
            throw Fault(end, "A number had two points; it must have one.");
        var value = double.Parse(text.AsSpan(start, end - start), NumberStyles.Float, CultureInfo.InvariantCulture);
        if (!double.IsFinite(value))
            throw Fault(start, $"The number {Shorten(text[start..end])} was too large; it must be below 1.8e308.");
        position = end;
        SkipSpace();
        return graph.Number(value);
    }

    private FormulaNode Name()
    {
        var start = position;
        var end = start;
        while (end < text.Length && FormulaLanguage.IsNamePart(text[end]))
            end++;
        var name = text[start..end];
        position = end;
        SkipSpace();
        var isCall = Peek() == '(';
        if (FormulaLanguage.FindFunction(name) is { } function)
        {
            if (!isCall)
                throw Fault(start, $"The function {name} stood without parentheses; its argument must follow in parentheses, as in {name}({(function.Arguments == 1 ? "x" : "x, 0")}).");
            return Call(function, start);
        }

        var node = name switch
        {
            "x" => graph.X,
            "y" when dimension == 2 => graph.Y,
            "y" => throw Fault(start, "The variable y was used in one dimension; only x may be used.", "Give the domain a y axis, or remove y."),
            "pi" => graph.Number(Math.PI),
            "e" => graph.Number(Math.E),
            _ => Constant(name) ?? throw Unknown(name, start, isCall),
        };
        if (isCall)
            throw Fault(start, $"{name} is not a function, yet a parenthesis follows it; a product must be written with *, as in {name}*(x).");
        return node;
    }

    private FormulaNode? Constant(string name)
    {
        if (!constants.TryGetValue(name, out var value))
            return null;
        used.Add(name);
        return graph.Number(value);
    }

    private FormulaNode Call(FormulaLanguage.FunctionEntry function, int start)
    {
        Enter();
        var open = position;
        Take('(');
        if (Peek() == ')')
            throw WrongCount(function, 0, start);
        var first = Sum();
        FormulaNode? second = null;
        var count = 1;
        while (Take(','))
        {
            second = Sum();
            count++;
        }

        Close(open, "parenthesis of " + function.Name);
        if (count != function.Arguments)
            throw WrongCount(function, count, start);
        depth--;
        return function.Kind switch
        {
            NodeKind.Minimum => graph.Minimum(first, second!),
            NodeKind.Maximum => graph.Maximum(first, second!),
            _ => graph.Apply(function.Kind, first),
        };
    }

    private void Close(int open, string what)
    {
        if (Take(')'))
            return;
        if (position == text.Length)
            throw Fault(open, $"The {what} opened here was never closed; a ')' must follow.");
        throw Unexpected();
    }

    private InputException WrongCount(FormulaLanguage.FunctionEntry function, int found, int start)
        => Fault(start, string.Create(
            CultureInfo.InvariantCulture, $"{function.Name} was given {found} argument{(found == 1 ? "" : "s")}; it must have {function.Arguments}."));

    private InputException MissingOperand()
    {
        if (position == text.Length)
            return Fault(position, "The formula ended early; a number, a name or a parenthesis must follow.");
        var character = text[position];
        var found = Show(position);
        return character switch
        {
            ')' => Fault(position, "A ')' stood where a number, a name or a '(' must stand."),
            '+' => Fault(position, "A '+' had nothing before it to add to; leave it out or write what it adds to."),
            '*' when position > 0 && text[position - 1] == '*' => Fault(position - 1, "** was found; a power must be written with ^, as in x^2."),
            '*' or '/' or '^' => Fault(position, $"The operator {character} had nothing before it; a number, a name or a parenthesis must stand there."),
            ',' => Fault(position, "A comma stood where a number, a name or a '(' must stand.", "Decimals are written with a point, as in 0.5."),
            _ => Fault(position, $"The character {found} was not understood here; a number, a name or a '(' must stand there.", Replacement(character)),
        };
    }

    private InputException Unexpected()
    {
        var character = text[position];
        var found = Show(position);
        if (char.IsAsciiDigit(character) || FormulaLanguage.IsNameStart(character) || character is '(' or '.')
            return Fault(position, $"An operator was missing before {ShowWord(position)}; a product must be written with *, as in 2*x.");

        return character switch
        {
            ')' => Fault(position, "This ')' closes nothing; remove it or open a '(' before it."),
            ',' => Fault(position, "A comma may only stand between the two arguments of min and max.", "Decimals are written with a point, as in 0.5."),
            _ => Fault(position, $"The character {found} was not understood; the operators are + - * / ^.", Replacement(character)),
        };
    }

    private InputException Unknown(string name, int start, bool isCall)
    {
        var shown = Shorten(name);
        if (FormulaLanguage.Elsewhere.TryGetValue(name, out var here))
            return Fault(start, $"The name {shown} is not known here.", $"Write {here}.");
        IEnumerable<string> candidates = FormulaLanguage.Functions.Select(function => function.Name);
        if (!isCall)
            candidates = FormulaLanguage.FixedNames.Where(fixedName => dimension == 2 || fixedName != "y").Concat(constants.Keys).Concat(candidates);
        var nearest = NearestName.Among(name, candidates);
        var known = isCall
            ? "The functions are " + string.Join(", ", FormulaLanguage.Functions.Select(function => function.Name)) + "."
            : constants.Count == 0
                ? $"The names are {(dimension == 2 ? "x, y" : "x")}, pi and e; others must be given as constants."
                : $"The names are {(dimension == 2 ? "x, y" : "x")}, pi, e and the constants {string.Join(", ", constants.Keys)}.";
        return Fault(start, $"The {(isCall ? "function" : "name")} {shown} is not known.", nearest is null ? known : $"Did you mean {nearest}?");
    }

    private static string? Replacement(char character) => character switch
    {
        '\u2212' or '\u2013' or '\u2014' or '\u00ad' => "Write the minus sign as -.",
        '\u00d7' or '\u00b7' or '\u22c5' or '\u2217' => "Write the product as *.",
        '\u00f7' or '\u2044' => "Write the quotient as /.",
        '\u00b2' => "Write the square as ^2.",
        '\u00b3' => "Write the cube as ^3.",
        '[' or ']' or '{' or '}' => "Use round parentheses.",
        '|' => "Write the absolute value as abs(u).",
        '=' or '<' or '>' => "A formula is an expression without comparisons; step(u) switches at u = 0.",
        '%' => "There is no remainder; use sin or cos for what repeats.",
        ';' => "Arguments are separated by a comma.",
        '!' => "There is no factorial; write the product out.",
        _ => null,
    };

    private void Enter()
    {
        if (++depth > FormulaLanguage.DeepestNesting)
        {
            throw Fault(position, string.Create(
                CultureInfo.InvariantCulture, $"The formula was nested more than {FormulaLanguage.DeepestNesting} deep here; it must be at most that."));
        }
    }

    private char Peek() => position < text.Length ? text[position] : '\0';

    private bool Take(char character)
    {
        if (position >= text.Length || text[position] != character)
            return false;
        position++;
        SkipSpace();
        return true;
    }

    private void SkipSpace()
    {
        while (position < text.Length && char.IsWhiteSpace(text[position]))
            position++;
    }

    private string Show(int at)
    {
        var character = text[at];
        if (char.IsSurrogatePair(text, at))
            return $"'{text[at..(at + 2)]}'";
        return char.IsControl(character) || char.IsSurrogate(character)
            ? string.Create(CultureInfo.InvariantCulture, $"U+{(int)character:X4}")
            : "'" + character + "'";
    }

    private string ShowWord(int at)
    {
        var end = at;
        while (end < text.Length && FormulaLanguage.IsNamePart(text[end]))
            end++;
        return end == at ? Show(at) : Shorten(text[at..end]);
    }

    private static string Shorten(string name) => name.Length <= 24 ? name : name[..20] + "...";

    private InputException Fault(int at, string message, string? remedy = null)
        => new(new InputFault(message, remedy, Column: at + 1, Detail: Caret(text, at)));

    /// <summary>The formula on one line and a caret under <paramref name="at"/>; a window of it where it is long.</summary>
    internal static string Caret(string text, int at)
    {
        const int window = 100;
        var from = text.Length <= window ? 0 : Math.Clamp(at - window / 2, 0, text.Length - window);
        var to = Math.Min(text.Length, from + window);
        var line = new StringBuilder();
        if (from > 0)
            line.Append("...");
        var lead = line.Length;
        // Line breaks, tabs and the like would tear the caret from its place.
        for (var i = from; i < to; i++)
            line.Append(char.IsControl(text[i]) ? ' ' : text[i]);
        if (to < text.Length)
            line.Append("...");
        return line.Append('\n').Append(' ', lead + at - from).Append('^').ToString();
    }
}
