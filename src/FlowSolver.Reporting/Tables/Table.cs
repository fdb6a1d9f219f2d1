using System.Globalization;
using FlowSolver.Foundation;

namespace FlowSolver.Reporting.Tables;

/// <summary>One cell of a table: a number, a whole number, a text, or nothing.</summary>
public readonly record struct Cell
{
    private Cell(double? number, string? text)
    {
        Number = number;
        Text = text;
    }

    /// <summary>A quantity that does not exist; written as an empty cell.</summary>
    public static Cell Empty { get; }

    /// <summary>The number; null for a text and for an empty cell.</summary>
    public double? Number { get; }

    /// <summary>The text; null for a number and for an empty cell.</summary>
    public string? Text { get; }

    /// <summary>Whether there is nothing in the cell.</summary>
    public bool IsEmpty => Number is null && Text is null;

    /// <summary>A number, or an empty cell for null.</summary>
    public static implicit operator Cell(double? number) => new(number, null);

    /// <summary>A number.</summary>
    public static implicit operator Cell(double number) => new(number, null);

    /// <summary>A whole number.</summary>
    public static implicit operator Cell(int number) => new(number, null);

    /// <summary>A text, or an empty cell for null.</summary>
    public static implicit operator Cell(string? text) => new(null, text);

    /// <summary>A number; the same as the conversion.</summary>
    public static Cell FromDouble(double number) => number;

    /// <summary>A whole number; the same as the conversion.</summary>
    public static Cell FromInt32(int number) => number;

    /// <summary>A text; the same as the conversion.</summary>
    public static Cell FromString(string? text) => text;

    /// <summary>The cell as it stands in a CSV file.</summary>
    public override string ToString() => Number is { } number ? Numbers.Exact(number) : Text ?? "";
}

/// <summary>A column.</summary>
/// <param name="Name">Its name in a CSV file.</param>
/// <param name="Heading">Its heading for a reader; null means the name.</param>
/// <param name="Unit">Its unit; null where there is none.</param>
public sealed record TableColumn(string Name, string? Heading = null, string? Unit = null);

/// <summary>Rows and columns without a format; <see cref="TableWriter"/> turns them to CSV, Markdown or LaTeX. Immutable.</summary>
public sealed record Table
{
    /// <summary>Makes a table and checks it: one cell a column in every row, every number finite.</summary>
    /// <param name="name">File name without its ending, such as <c>series</c>.</param>
    /// <param name="columns">Columns, at least one.</param>
    /// <param name="rows">Rows; one cell a column.</param>
    /// <param name="caption">One sentence for the reader; empty where none is needed.</param>
    /// <exception cref="ArgumentException">A row has the wrong number of cells, or a number is NaN or infinite.</exception>
    public Table(string name, IReadOnlyList<TableColumn> columns, IReadOnlyList<IReadOnlyList<Cell>> rows, string caption = "")
    {
        ArgumentException.ThrowIfNullOrEmpty(name);
        ArgumentNullException.ThrowIfNull(columns);
        ArgumentNullException.ThrowIfNull(rows);
        Require.That(columns.Count > 0, $"The table '{name}' had no column; it must have at least one.");
        for (var r = 0; r < rows.Count; r++)
        {
            Require.That(rows[r].Count == columns.Count, string.Create(CultureInfo.InvariantCulture,
                $"Row {r + 1} of the table '{name}' had {rows[r].Count} cells; it must have {columns.Count}, one a column."));
            for (var c = 0; c < columns.Count; c++)
            {
                if (rows[r][c].Number is { } number && !double.IsFinite(number))
                {
                    throw new ArgumentException(string.Create(CultureInfo.InvariantCulture,
                        $"Row {r + 1}, column '{columns[c].Name}' of the table '{name}' was {Numbers.Name(number)}; it must be finite, or empty where the quantity does not exist."));
                }
            }
        }

        Name = name;
        Columns = columns;
        Rows = rows;
        Caption = caption;
    }

    /// <summary>File name without its ending.</summary>
    public string Name { get; }

    /// <summary>Columns.</summary>
    public IReadOnlyList<TableColumn> Columns { get; }

    /// <summary>Rows; one cell a column.</summary>
    public IReadOnlyList<IReadOnlyList<Cell>> Rows { get; }

    /// <summary>One sentence for the reader; may be empty.</summary>
    public string Caption { get; }
}
