using System.Globalization;
using FlowSolver.Foundation;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>
/// The values of a case file, checked against the table of keys: every key is known, of its kind and within its range, and defaults are filled in.
/// </summary>
internal sealed class CaseValues
{
    private readonly string file;
    private readonly List<InputFault> faults;
    private readonly Dictionary<string, object> values = [];
    private readonly Dictionary<string, CaseItem> items = [];
    private readonly Dictionary<string, int> lines = [];
    private readonly Dictionary<string, CaseTable> tables = [];

    public CaseValues(CaseTable root, string file, List<InputFault> faults)
    {
        this.file = file;
        this.faults = faults;
        Collect(root, "");
        CheckMissing();
        CheckExclusions();
        foreach (var key in CaseKeys.All)
        {
            if (key.Default is not null && !lines.ContainsKey(key.Path) && Applies(key))
                values[key.Path] = Convert(key, CaseTree.ParseValue(key.Default), 1)!;
        }
    }

    /// <summary>Whether the file has the key or table, rightly or wrongly filled.</summary>
    public bool IsGiven(string path) => lines.ContainsKey(path) || tables.ContainsKey(path);

    /// <summary>The value of a key, given or by default: a string, double, long, list, matrix or dictionary by its kind; null when there is none that can be used.</summary>
    public object? Find(string path) => values.GetValueOrDefault(path);

    public string? Text(string path) => Find(path) as string;

    public double? Number(string path) => Find(path) as double?;

    public long? Whole(string path) => Find(path) as long?;

    /// <summary>The item in the file; null for a default.</summary>
    public CaseItem? Item(string path) => items.GetValueOrDefault(path);

    /// <summary>Line of a key or table; that of the nearest table above it when it is not given.</summary>
    public int LineOf(string path)
    {
        while (true)
        {
            if (lines.TryGetValue(path, out var line))
                return line;
            if (tables.TryGetValue(path, out var table))
                return table.Line;
            if (path.Length == 0)
                return 1;
            path = path.Contains('.', StringComparison.Ordinal) ? path[..path.LastIndexOf('.')] : "";
        }
    }

    /// <summary>Adds a fault at a key.</summary>
    public void Fault(string path, string message, string? remedy = null, int? line = null)
        => faults.Add(new InputFault(message, remedy, file, line ?? LineOf(path), Key: path));

    /// <summary>Names of a table of numbers with the lines on which they stand.</summary>
    public IEnumerable<(string Name, int Line)> NamesOf(string path)
        => Item(path)?.Value is CaseTable table ? table.Keys.Select(name => (name, table.LineOf(name))) : [];

    /// <summary>Whether a key plays a part in this case: its table stands or has to, and nothing that excludes it stands.</summary>
    public bool Applies(CaseKey key)
        => (tables.ContainsKey(key.Table) || CaseKeys.FindTable(key.Table) is { IsRequired: true } || key.Table is "methods" or "ensemble" or "tolerances" or "labels")
            && !key.Excludes.Any(IsGiven);

    private void Collect(CaseTable table, string prefix)
    {
        tables[prefix] = table;
        foreach (var name in table.Keys)
        {
            var path = prefix.Length == 0 ? name : prefix + "." + name;
            var item = table.Find(name)!;
            var line = table.LineOf(name);
            if (CaseKeys.FindTable(path) is not null)
            {
                if (item.Value is CaseTable inner)
                    Collect(inner, path);
                else
                    faults.Add(new InputFault($"It was {item.Shown}; it must be a table.", Example(path), file, line, Key: path));
            }
            else if (CaseKeys.Find(path) is { } key)
            {
                lines[path] = line;
                items[path] = item;
                if (Convert(key, item, line) is { } value)
                    values[path] = value;
            }
            else
            {
                faults.Add(new InputFault("The key is not known.", Suggestion(name, prefix), file, line, Key: Cut(path)));
            }
        }
    }

    private static string Cut(string path) => path.Length <= 60 ? path.ReplaceLineEndings(" ") : path.ReplaceLineEndings(" ")[..57] + "...";

    private static string Suggestion(string name, string prefix)
    {
        var here = CaseKeys.All.Where(key => key.Table == prefix).Select(key => key.Name)
            .Concat(CaseKeys.Tables.Where(table => table.Path.Length > 0 && ParentOf(table.Path) == prefix).Select(table => table.Path[(table.Path.LastIndexOf('.') + 1)..]))
            .ToList();
        if (NearestName.Among(name, here) is { } nearest)
            return $"Did you mean {nearest}?";
        // A key under the wrong header is as common as a mistyped one.
        if (CaseKeys.All.FirstOrDefault(key => key.Name == name) is { } elsewhere)
            return $"Did you mean {elsewhere.Path}?";
        return prefix.Length == 0 ? $"The tables and keys at the top are {string.Join(", ", here)}." : $"The keys of [{prefix}] are {string.Join(", ", here)}.";
    }

    private static string ParentOf(string path) => path.Contains('.', StringComparison.Ordinal) ? path[..path.LastIndexOf('.')] : "";

    private static string Example(string path)
        => $"Its keys are {string.Join(", ", CaseKeys.All.Where(key => key.Path.StartsWith(path + ".", StringComparison.Ordinal)).Select(key => key.Path[(path.Length + 1)..]))}.";

    private object? Convert(CaseKey key, CaseItem item, int line)
    {
        switch (key.Kind)
        {
            case CaseValueKind.Text or CaseValueKind.Formula or CaseValueKind.FilePath:
                if (item.Value is string text)
                    return text;
                break;
            case CaseValueKind.Choice:
                if (item.Value is string choice)
                {
                    if (key.Choices.Contains(choice))
                        return choice;
                    return Wrong(key, item, line, NearestName.Among(choice, key.Choices) is { } nearest ? $"Did you mean \"{nearest}\"?" : null);
                }

                break;
            case CaseValueKind.Number:
                if (AsNumber(item) is { } number && double.IsFinite(number) && !(key.IsPositive && number <= 0))
                    return number;
                break;
            case CaseValueKind.WholeNumber:
                if (item.Value is long whole && whole >= (key.Least ?? long.MinValue) && whole <= (key.Most ?? long.MaxValue))
                    return whole;
                if (item.Value is double real && real == Math.Floor(real) && real >= (key.Least ?? -1e15) && real <= Math.Min(key.Most ?? long.MaxValue, 1e15))
                    return Wrong(key, item, line, string.Create(CultureInfo.InvariantCulture, $"Write {(long)real}, without a point."));
                break;
            case CaseValueKind.NumberList:
                if (AsNumber(item) is not null)
                    return Wrong(key, item, line, $"Write [{item.Shown}].");
                return item.Value is IReadOnlyList<CaseItem> list ? Numbers(key, list, line) : Wrong(key, item, line);
            case CaseValueKind.NumberMatrix:
                return item.Value is IReadOnlyList<CaseItem> rows ? Matrix(key, rows, line) : Wrong(key, item, line);
            case CaseValueKind.NameList:
                if (item.Value is string one)
                    return Wrong(key, item, line, $"Write [\"{one.ReplaceLineEndings(" ")}\"].");
                return item.Value is IReadOnlyList<CaseItem> names ? Names(key, names, line) : Wrong(key, item, line);
            case CaseValueKind.NumberTable:
                return item.Value is CaseTable table ? NumberTable(key, table) : Wrong(key, item, line);
        }

        return Wrong(key, item, line);
    }

    private object? Wrong(CaseKey key, CaseItem item, int line, string? remedy = null)
    {
        faults.Add(new InputFault(
            $"It was {item.Shown}; it must be {key.Rule}.", remedy ?? $"For example: {key.Name} = {key.Example}", file, line, item.Column, key.Path));
        return null;
    }

    private double[]? Numbers(CaseKey key, IReadOnlyList<CaseItem> list, int line)
    {
        var numbers = new double[list.Count];
        for (var i = 0; i < numbers.Length; i++)
        {
            if (AsNumber(list[i]) is not { } number || !double.IsFinite(number))
            {
                faults.Add(new InputFault(
                    string.Create(CultureInfo.InvariantCulture, $"Entry {i + 1} was {list[i].Shown}; it must be a finite number."), File: file, Line: list[i].Line, Column: list[i].Column, Key: key.Path));
                return null;
            }

            numbers[i] = number;
        }

        if (numbers.Length > 0)
            return numbers;
        faults.Add(new InputFault($"It was an empty list; it must be {key.Rule}.", $"For example: {key.Name} = {key.Example}", file, line, Key: key.Path));
        return null;
    }

    private double[][]? Matrix(CaseKey key, IReadOnlyList<CaseItem> rows, int line)
    {
        var matrix = new double[rows.Count][];
        for (var i = 0; i < matrix.Length; i++)
        {
            if (rows[i].Value is not IReadOnlyList<CaseItem> row)
            {
                faults.Add(new InputFault(
                    string.Create(CultureInfo.InvariantCulture, $"Row {i + 1} was {rows[i].Shown}; it must be a list of numbers."), $"For example: {key.Name} = {key.Example}", file, rows[i].Line, rows[i].Column, key.Path));
                return null;
            }

            if (Numbers(key, row, rows[i].Line) is not { } numbers)
                return null;
            matrix[i] = numbers;
        }

        if (matrix.Length > 0)
            return matrix;
        faults.Add(new InputFault($"It was an empty list; it must be {key.Rule}.", $"For example: {key.Name} = {key.Example}", file, line, Key: key.Path));
        return null;
    }

    private string[]? Names(CaseKey key, IReadOnlyList<CaseItem> list, int line)
    {
        var names = new string[list.Count];
        for (var i = 0; i < names.Length; i++)
        {
            if (list[i].Value is not string name)
            {
                faults.Add(new InputFault(
                    string.Create(CultureInfo.InvariantCulture, $"Entry {i + 1} was {list[i].Shown}; it must be a name in quotes."), File: file, Line: list[i].Line, Column: list[i].Column, Key: key.Path));
                return null;
            }

            if (Array.IndexOf(names, name, 0, i) >= 0)
            {
                faults.Add(new InputFault($"{list[i].Shown} was listed twice; it must stand once.", "Remove one of the two.", file, list[i].Line, list[i].Column, key.Path));
                return null;
            }

            names[i] = name;
        }

        return names;
    }

    private Dictionary<string, double>? NumberTable(CaseKey key, CaseTable table)
    {
        var numbers = new Dictionary<string, double>();
        var isRight = true;
        foreach (var name in table.Keys)
        {
            var item = table.Find(name)!;
            if (AsNumber(item) is { } number && double.IsFinite(number))
            {
                numbers.Add(name, number);
                continue;
            }

            faults.Add(new InputFault($"It was {item.Shown}; it must be a finite number.", File: file, Line: table.LineOf(name), Column: item.Column, Key: Cut(key.Path + "." + name)));
            isRight = false;
        }

        return isRight ? numbers : null;
    }

    private static double? AsNumber(CaseItem item) => item.Value switch
    {
        long whole => whole,
        double number => number,
        _ => null,
    };

    private void CheckMissing()
    {
        foreach (var table in CaseKeys.Tables)
        {
            if (!table.IsRequired || tables.ContainsKey(table.Path) || lines.ContainsKey(table.Path))
                continue;
            // A missing [domain] is one fault, not also a missing [domain.x]; a table that stands but is no table has its fault already.
            if (!tables.ContainsKey(ParentOf(table.Path)) || faults.Exists(fault => fault.Key == table.Path))
                continue;
            faults.Add(new InputFault($"The table was not given; it must stand. {table.Meaning}", Example(table.Path), file, LineOf(table.Path), Key: table.Path));
        }

        foreach (var key in CaseKeys.All)
        {
            if (key.IsRequired && tables.ContainsKey(key.Table) && !lines.ContainsKey(key.Path))
                faults.Add(new InputFault($"The key was not given; it must be {key.Rule}.", $"For example: {key.Name} = {key.Example}", file, LineOf(key.Path), Key: key.Path));
        }
    }

    private void CheckExclusions()
    {
        foreach (var key in CaseKeys.All)
        {
            foreach (var other in key.Excludes)
            {
                // Each pair once, at the one that stands later.
                if (!lines.ContainsKey(key.Path) || !IsGiven(other))
                    continue;
                var isLater = LineOf(key.Path) > LineOf(other) || (LineOf(key.Path) == LineOf(other) && string.CompareOrdinal(key.Path, other) > 0);
                if (isLater || !CaseKeys.All.Any(twin => twin.Path == other && twin.Excludes.Contains(key.Path)))
                    faults.Add(new InputFault($"{key.Path} and {other} were both given; only one of them may stand.", "Remove one of the two.", file, LineOf(key.Path), Key: key.Path));
            }
        }
    }
}
