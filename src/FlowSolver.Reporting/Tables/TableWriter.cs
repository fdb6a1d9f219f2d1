using System.Globalization;
using System.Text;
using CsvHelper;

namespace FlowSolver.Reporting.Tables;

/// <summary>
/// Writes a <see cref="Table"/>. CSV carries every digit (the shortest text that reads back the same), invariant culture, LF line ends, UTF-8
/// without a mark, an empty cell where there is nothing; the same table gives the same bytes. Markdown and LaTeX are for reading and round.
/// </summary>
public static class TableWriter
{
    internal static CsvWriterOptions CsvOptions { get; } = new()
    {
        NewLine = "\n",
        FormatProvider = CultureInfo.InvariantCulture,
        WriteByteOrderMark = false,
    };

    /// <summary>Writes <c>&lt;directory&gt;/&lt;name&gt;.csv</c> and returns its path.</summary>
    public static string WriteCsv(Table table, string directory)
    {
        ArgumentNullException.ThrowIfNull(table);
        ArgumentNullException.ThrowIfNull(directory);
        var path = Path.Combine(directory, table.Name + ".csv");
        using var stream = new FileStream(path, FileMode.Create, FileAccess.Write, FileShare.Read);
        WriteCsv(table, stream);
        return path;
    }

    /// <summary>Writes a table as CSV to a stream, which stays open.</summary>
    public static void WriteCsv(Table table, Stream stream)
    {
        ArgumentNullException.ThrowIfNull(table);
        ArgumentNullException.ThrowIfNull(stream);
        using var writer = CsvWriter.Create(stream, CsvOptions, leaveOpen: true);
        foreach (var column in table.Columns)
            writer.WriteField(column.Name);
        writer.EndRecord();
        foreach (var row in table.Rows)
        {
            foreach (var cell in row)
            {
                if (cell.Number is { } number)
                    writer.WriteField(Numbers.Exact(number));
                else
                    writer.WriteField(cell.Text ?? "");
            }

            writer.EndRecord();
        }
    }

    /// <summary>The table as CSV text, for standard output.</summary>
    public static string Csv(Table table)
    {
        using var stream = new MemoryStream();
        WriteCsv(table, stream);
        return Encoding.UTF8.GetString(stream.GetBuffer(), 0, (int)stream.Length);
    }

    /// <summary>The table in Markdown, columns padded so that the text itself reads as a table; numbers to the right.</summary>
    /// <param name="table">The table.</param>
    /// <param name="digits">Significant digits.</param>
    public static string Markdown(Table table, int digits = 4)
    {
        ArgumentNullException.ThrowIfNull(table);
        var texts = table.Rows.Select(row => row.Select(cell => MarkdownText(cell, digits)).ToArray()).ToArray();
        var heads = table.Columns.Select(column => MarkdownEscaped(CaseLabels.WithUnit(column.Heading ?? column.Name, column.Unit))).ToArray();
        var right = Enumerable.Range(0, heads.Length).Select(c => IsNumeric(table, c)).ToArray();
        var widths = Enumerable.Range(0, heads.Length).Select(c => Math.Max(3, texts.Select(row => row[c].Length).Append(heads[c].Length).Max())).ToArray();
        var text = new StringBuilder();
        Line(heads);
        text.Append('|');
        for (var c = 0; c < heads.Length; c++)
            text.Append(' ').Append('-', widths[c] - 1).Append(right[c] ? ':' : '-').Append(" |");
        text.Append('\n');
        foreach (var row in texts)
            Line(row);
        if (table.Caption.Length > 0)
            text.Append('\n').Append(table.Caption).Append('\n');
        return text.ToString();

        void Line(string[] cells)
        {
            text.Append('|');
            for (var c = 0; c < cells.Length; c++)
                text.Append(' ').Append(right[c] ? cells[c].PadLeft(widths[c]) : cells[c].PadRight(widths[c])).Append(" |");
            text.Append('\n');
        }
    }

    /// <summary>
    /// The table as a LaTeX <c>tabular</c> that needs the package <c>booktabs</c> only; powers of ten are set as such, special characters escaped.
    /// </summary>
    /// <param name="table">The table.</param>
    /// <param name="digits">Significant digits.</param>
    public static string Latex(Table table, int digits = 4)
    {
        ArgumentNullException.ThrowIfNull(table);
        var text = new StringBuilder();
        if (table.Caption.Length > 0)
            text.Append("% ").Append(table.Caption).Append('\n');
        text.Append("\\begin{tabular}{");
        for (var c = 0; c < table.Columns.Count; c++)
            text.Append(IsNumeric(table, c) ? 'r' : 'l');
        text.Append("}\n\\toprule\n");
        text.AppendJoin(" & ", table.Columns.Select(column => LatexEscaped(CaseLabels.WithUnit(column.Heading ?? column.Name, column.Unit)))).Append(" \\\\\n\\midrule\n");
        foreach (var row in table.Rows)
            text.AppendJoin(" & ", row.Select(cell => LatexText(cell, digits))).Append(" \\\\\n");
        return text.Append("\\bottomrule\n\\end{tabular}\n").ToString();
    }

    private static bool IsNumeric(Table table, int column)
        => table.Rows.Any(row => row[column].Number is not null) && table.Rows.All(row => row[column].Text is null);

    private static string MarkdownText(Cell cell, int digits)
        => cell.Number is { } number ? Numbers.Short(number, digits) : MarkdownEscaped(cell.Text ?? "");

    private static string MarkdownEscaped(string text) => text.Replace("|", "\\|", StringComparison.Ordinal).ReplaceLineEndings(" ");

    private static string LatexText(Cell cell, int digits)
    {
        if (cell.Number is not { } number)
            return LatexEscaped(cell.Text ?? "");
        var shown = Numbers.Short(number, digits);
        var power = shown.IndexOf('e', StringComparison.Ordinal);
        return power < 0 ? "$" + shown + "$" : "$" + shown[..power] + "\\times 10^{" + shown[(power + 1)..] + "}$";
    }

    private static string LatexEscaped(string text)
    {
        var escaped = new StringBuilder(text.Length + 8);
        foreach (var c in text.ReplaceLineEndings(" "))
        {
            _ = c switch
            {
                '&' or '%' or '$' or '#' or '_' or '{' or '}' => escaped.Append('\\').Append(c),
                '~' => escaped.Append("\\textasciitilde{}"),
                '^' => escaped.Append("\\textasciicircum{}"),
                '\\' => escaped.Append("\\textbackslash{}"),
                'µ' or 'μ' => escaped.Append("$\\mu$"),
                'τ' => escaped.Append("$\\tau$"),
                'ρ' => escaped.Append("$\\rho$"),
                '²' => escaped.Append("$^2$"),
                '−' => escaped.Append("$-$"),
                '\u00a0' => escaped.Append('~'),
                _ => escaped.Append(c),
            };
        }

        return escaped.ToString();
    }
}
