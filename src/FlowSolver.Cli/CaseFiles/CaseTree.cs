using System.Globalization;
using System.Text.RegularExpressions;
using FlowSolver.Foundation;
using Tomlyn;
using Tomlyn.Parsing;
using Tomlyn.Syntax;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>A value of a case file with its place.</summary>
/// <param name="Value">
/// A <see cref="string"/>, <see cref="long"/>, <see cref="double"/>, <see cref="bool"/>, <see cref="DateTimeOffset"/> (any date or time), a list of
/// <see cref="CaseItem"/> or a <see cref="CaseTable"/>.
/// </param>
/// <param name="Line">Line, counted from 1.</param>
/// <param name="Column">Column, counted from 1.</param>
/// <param name="IsPlainText">Whether it is a string whose characters stand in the file as they are, so that a column inside it can be told.</param>
internal sealed record CaseItem(object Value, int Line, int Column, bool IsPlainText = false)
{
    /// <summary>How the value is shown in a message.</summary>
    public string Shown => Value switch
    {
        string text => text.Length <= 40 ? $"\"{text.ReplaceLineEndings(" ")}\"" : $"\"{text.ReplaceLineEndings(" ")[..37]}...\"",
        bool flag => flag ? "true" : "false",
        long number => number.ToString(CultureInfo.InvariantCulture),
        double number => double.IsNaN(number) ? "not a number" : double.IsInfinity(number) ? number > 0 ? "infinite" : "minus infinity" : WithPoint(number),
        DateTimeOffset => "a date",
        IReadOnlyList<CaseItem> list => list.Count == 0 ? "an empty list" : "a list",
        _ => "a table",
    };

    // A number that was written with a point is shown with one: where a whole number is needed that is the fault.
    private static string WithPoint(double number)
    {
        var text = number.ToString("R", CultureInfo.InvariantCulture);
        return text.AsSpan().ContainsAny(".E") ? text : text + ".0";
    }
}

/// <summary>A table of a case file: keys in the order in which they stand.</summary>
/// <param name="line">Line of its header or brace, counted from 1.</param>
internal sealed class CaseTable(int line)
{
    private readonly Dictionary<string, (CaseItem Item, int Line)> entries = [];
    private readonly List<string> order = [];

    /// <summary>Line of its header or brace, counted from 1.</summary>
    public int Line { get; set; } = line;

    /// <summary>Whether it has had a header of its own or an inline body, after which no second one may follow.</summary>
    public bool IsClosed { get; set; }

    /// <summary>Keys in order.</summary>
    public IReadOnlyList<string> Keys => order;

    public CaseItem? Find(string key) => entries.TryGetValue(key, out var entry) ? entry.Item : null;

    /// <summary>Line on which a key stands.</summary>
    public int LineOf(string key) => entries[key].Line;

    public void Add(string key, CaseItem item, int lineOfKey)
    {
        entries.Add(key, (item, lineOfKey));
        order.Add(key);
    }
}

/// <summary>
/// Reads TOML into tables that know their lines. Works on the syntax tree, because the deserializer passes unknown and repeated keys silently.
/// </summary>
internal sealed partial class CaseTree
{
    private const int MostSyntaxFaults = 10;
    private const int DeepestNesting = 16;
    private const int DeepestPath = 8;
    private readonly string file;
    private readonly List<InputFault> faults;

    private CaseTree(string file, List<InputFault> faults)
    {
        this.file = file;
        this.faults = faults;
    }

    /// <summary>Reads a text; adds what is wrong with its form to <paramref name="faults"/>.</summary>
    /// <returns>The root table; null when the text is no TOML.</returns>
    public static CaseTable? Parse(string text, string file, List<InputFault> faults)
    {
        DocumentSyntax document;
        try
        {
            document = SyntaxParser.Parse(text, new TomlSerializerOptions { MaxDepth = DeepestNesting }, file, validate: false);
        }
        catch (TomlException exception)
        {
            faults.Add(new InputFault($"The text is not TOML: {Sentence(exception.Message)}", File: file, Line: exception.Line ?? LineOfDepth(text), Column: exception.Column));
            return null;
        }
        catch (ArgumentOutOfRangeException)
        {
            // The parser falls over a backslash that is the last character of the text, inside quotes that were never closed.
            faults.Add(new InputFault("The text is not TOML: it ended inside quotes.", "Close them.", file, text.AsSpan().Count('\n') + 1));
            return null;
        }

        if (document.HasErrors)
        {
            foreach (var diagnostic in document.Diagnostics)
            {
                if (diagnostic.Kind != DiagnosticMessageKind.Error || faults.Count >= MostSyntaxFaults)
                    continue;
                var start = diagnostic.Span.Start;
                // One slip makes the parser stumble several times on a line; the first message is the telling one.
                if (faults.Count == 0 || faults[^1].Line != start.Line + 1)
                {
                    faults.Add(new InputFault($"The text is not TOML: {Sentence(diagnostic.Message)}", File: file, Line: start.Line + 1, Column: start.Column + 1));
                }
            }

            return null;
        }

        var root = new CaseTable(1);
        new CaseTree(file, faults).Fill(document, root);
        return root;
    }

    /// <summary>The line on which brackets are first nested too deep; the parser does not say. Brackets inside text count too, which may place it early.</summary>
    private static int? LineOfDepth(string text)
    {
        var (depth, line) = (0, 1);
        foreach (var character in text)
        {
            if (character == '\n')
                line++;
            else if (character is '[' or '{' && ++depth > DeepestNesting)
                return line;
            else if (character is ']' or '}')
                depth = Math.Max(0, depth - 1);
        }

        return null;
    }

    /// <summary>Reads one value as it would stand in a file; for the defaults of the table of keys.</summary>
    public static CaseItem ParseValue(string literal)
    {
        var faults = new List<InputFault>();
        return Parse("value = " + literal + "\n", "", faults)?.Find("value")
            ?? throw new ArgumentException($"The default was {literal}; it must be a TOML value.");
    }

    private void Fill(DocumentSyntax document, CaseTable root)
    {
        foreach (var pair in document.KeyValues)
            AddPair(root, pair, "");
        foreach (var table in document.Tables)
        {
            var line = table.Span.Start.Line + 1;
            if (PathOf(table.Name!, line) is not { } path)
                continue;
            if (table is TableArraySyntax)
            {
                faults.Add(new InputFault(
                    $"[[{string.Join('.', path)}]] was a list of tables; it must be one table.", $"Write [{string.Join('.', path)}].", file, line,
                    Key: string.Join('.', path)));
                continue;
            }

            if (Descend(root, path, line, "") is not { } target)
                continue;
            if (target.IsClosed)
            {
                faults.Add(new InputFault(
                    string.Create(CultureInfo.InvariantCulture, $"The table [{string.Join('.', path)}] was given twice; it must stand once. It was first given on line {target.Line}."),
                    "Put all of its keys under one header.", file, line, Key: string.Join('.', path)));
            }

            target.IsClosed = true;
            target.Line = line;
            foreach (var pair in table.Items)
                AddPair(target, pair, string.Join('.', path));
        }
    }

    private void AddPair(CaseTable table, KeyValueSyntax pair, string prefix)
    {
        var line = pair.Key!.Span.Start.Line + 1;
        if (PathOf(pair.Key, line) is not { } path)
            return;
        if (Descend(table, path.AsSpan(0, path.Length - 1), line, prefix) is not { } target)
            return;
        var key = path[^1];
        var full = Join(prefix, string.Join('.', path));
        if (target.Find(key) is not null)
        {
            faults.Add(new InputFault(
                string.Create(CultureInfo.InvariantCulture, $"The key was given twice; it must stand once. It was first given on line {target.LineOf(key)}."),
                "Remove one of the two.", file, line, pair.Key.Span.Start.Column + 1, full));
            return;
        }

        if (Convert(pair.Value!, full) is { } item)
            target.Add(key, item, line);
    }

    private CaseTable? Descend(CaseTable table, ReadOnlySpan<string> path, int line, string prefix)
    {
        foreach (var key in path)
        {
            prefix = Join(prefix, key);
            var item = table.Find(key);
            if (item is null)
            {
                var child = new CaseTable(line);
                table.Add(key, new CaseItem(child, line, 1), line);
                table = child;
            }
            else if (item.Value is CaseTable existing)
            {
                table = existing;
            }
            else
            {
                faults.Add(new InputFault(
                    string.Create(CultureInfo.InvariantCulture, $"{prefix} is used as a table here, but it was given a value on line {table.LineOf(key)}; it must be one of the two."),
                    File: file, Line: line, Key: prefix));
                return null;
            }
        }

        return table;
    }

    private CaseItem? Convert(ValueSyntax syntax, string path)
    {
        var start = syntax.Span.Start;
        var (line, column) = (start.Line + 1, start.Column + 1);
        switch (syntax)
        {
            case StringValueSyntax text:
                var isPlain = text.Token is { } token && token.Text is { Length: >= 2 } written && written.AsSpan(1, written.Length - 2).SequenceEqual(text.Value);
                return new CaseItem(text.Value ?? "", line, column, isPlain);
            case IntegerValueSyntax number:
                return new CaseItem(number.Value, line, column);
            case FloatValueSyntax number:
                return new CaseItem(number.Value, line, column);
            case BooleanValueSyntax flag:
                return new CaseItem(flag.Value, line, column);
            case DateTimeValueSyntax:
                return new CaseItem(DateTimeOffset.UnixEpoch, line, column);
            case ArraySyntax array:
                var items = new List<CaseItem>();
                foreach (var item in array.Items)
                {
                    if (item.Value is not null && Convert(item.Value, path) is { } converted)
                        items.Add(converted);
                }

                return new CaseItem(items, line, column);
            case InlineTableSyntax inline:
                var table = new CaseTable(line) { IsClosed = true };
                foreach (var item in inline.Items)
                {
                    if (item.KeyValue is not null)
                        AddPair(table, item.KeyValue, path);
                }

                return new CaseItem(table, line, column);
            default:
                faults.Add(new InputFault("The value was not understood; it must be text, a number, a list or a table.", File: file, Line: line, Column: column, Key: path));
                return null;
        }
    }

    private string[]? PathOf(KeySyntax key, int line)
    {
        var parts = new List<string> { NameOf(key.Key!) };
        foreach (var dotted in key.DotKeys)
        {
            if (parts.Count == DeepestPath)
            {
                faults.Add(new InputFault(
                    string.Create(CultureInfo.InvariantCulture, $"A key had more than {DeepestPath} parts; no key of a case has more than four."), File: file, Line: line));
                return null;
            }

            parts.Add(NameOf(dotted.Key!));
        }

        return [.. parts];
    }

    private static string NameOf(BareKeyOrStringValueSyntax key) => key switch
    {
        BareKeySyntax bare => bare.Key?.Text ?? "",
        StringValueSyntax quoted => quoted.Value ?? "",
        _ => key.ToString() ?? "",
    };

    private static string Join(string prefix, string key) => prefix.Length == 0 ? key : prefix + "." + key;

    [GeneratedRegex(@" \(token: `[^`]*`\)")]
    private static partial Regex TokenKindNote();

    private static string Sentence(string message)
    {
        if (message.Contains("maximum depth", StringComparison.OrdinalIgnoreCase))
            return string.Create(CultureInfo.InvariantCulture, $"lists and tables were nested more than {DeepestNesting} deep.");
        // The parser shows a line end as a symbol and names its own token kinds; neither means anything to the reader.
        var text = TokenKindNote().Replace(message, "").Replace("`\u2424`", "the end of the line", StringComparison.Ordinal)
            .Replace("token `newline`", "the end of the line", StringComparison.Ordinal).ReplaceLineEndings(" ").Trim();
        if (text.Length > 200)
            text = text[..197] + "...";
        return text.EndsWith('.') ? text : text + ".";
    }
}
