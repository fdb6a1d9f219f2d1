using System.Text;

namespace FlowSolver.Cli;

/// <summary>A table of text with aligned columns for standard output: words to the left, numbers to the right.</summary>
internal sealed class TextTable(params string[] header)
{
    private readonly List<string[]> rows = [];

    /// <summary>Adds a row with as many cells as the header.</summary>
    public void Add(params string[] cells) => rows.Add(cells);

    /// <summary>Whether there are no rows.</summary>
    public bool IsEmpty => rows.Count == 0;

    /// <summary>The table, each line indented by two blanks.</summary>
    public override string ToString()
    {
        var widths = new int[header.Length];
        var numeric = new bool[header.Length];
        for (var c = 0; c < header.Length; c++)
        {
            widths[c] = rows.Select(row => row[c].Length).Append(header[c].Length).Max();
            numeric[c] = rows.Count > 0 && rows.TrueForAll(row => row[c].Length == 0 || char.IsDigit(row[c][0]) || row[c][0] is '-' or '−' or '<');
        }

        var text = new StringBuilder();
        foreach (var row in rows.Prepend(header))
        {
            var line = new StringBuilder(" ");
            for (var c = 0; c < row.Length; c++)
                line.Append(' ').Append(numeric[c] ? row[c].PadLeft(widths[c]) : row[c].PadRight(widths[c])).Append(' ');
            text.AppendLine(line.ToString().TrimEnd());
        }

        return text.ToString();
    }
}
