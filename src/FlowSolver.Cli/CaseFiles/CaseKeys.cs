namespace FlowSolver.Cli.CaseFiles;

/// <summary>What kind of value a key takes.</summary>
public enum CaseValueKind
{
    /// <summary>Text.</summary>
    Text,

    /// <summary>Text that is a formula.</summary>
    Formula,

    /// <summary>Text that names a file, relative to the case file.</summary>
    FilePath,

    /// <summary>One of a few words.</summary>
    Choice,

    /// <summary>A finite number, with or without a point.</summary>
    Number,

    /// <summary>A number without a point.</summary>
    WholeNumber,

    /// <summary>A list of finite numbers.</summary>
    NumberList,

    /// <summary>A list of lists of finite numbers, one a row.</summary>
    NumberMatrix,

    /// <summary>A list of names.</summary>
    NameList,

    /// <summary>A table of names of the reader's choice with finite numbers.</summary>
    NumberTable,
}

/// <summary>One key of a case file: what the reader checks and what a reference page prints.</summary>
/// <param name="Path">Dotted path, such as <c>time.step</c>.</param>
/// <param name="Kind">Kind of value.</param>
/// <param name="Meaning">One sentence.</param>
/// <param name="Example">A value as it would stand in the file.</param>
public sealed record CaseKey(string Path, CaseValueKind Kind, string Meaning, string Example)
{
    /// <summary>The value as it would stand in the file when the key is left out; null where it has none.</summary>
    public string? Default { get; init; }

    /// <summary>Unit in words, such as <c>length</c> or <c>energy</c>; empty for a pure number or text.</summary>
    public string Unit { get; init; } = "";

    /// <summary>Whether the key must stand wherever its table does (for tables that may be left out) or always (for the others).</summary>
    public bool IsRequired { get; init; }

    /// <summary>Number: whether it must be above 0.</summary>
    public bool IsPositive { get; init; }

    /// <summary>Whole number: least value.</summary>
    public long? Least { get; init; }

    /// <summary>Whole number: largest value.</summary>
    public long? Most { get; init; }

    /// <summary>Choice: the words.</summary>
    public IReadOnlyList<string> Choices { get; init; } = [];

    /// <summary>Keys that may not stand beside this one.</summary>
    public IReadOnlyList<string> Excludes { get; init; } = [];

    /// <summary>The path of its table.</summary>
    public string Table => Path.Contains('.', StringComparison.Ordinal) ? Path[..Path.LastIndexOf('.')] : "";

    /// <summary>Its own name.</summary>
    public string Name => Path[(Path.LastIndexOf('.') + 1)..];

    /// <summary>The rule that its value must obey, to follow "it must be".</summary>
    public string Rule => Kind switch
    {
        CaseValueKind.Text => "text in quotes",
        CaseValueKind.Formula => "a formula in quotes",
        CaseValueKind.FilePath => "the name of a file in quotes",
        CaseValueKind.Choice => string.Join(" or ", Choices.Select(choice => $"\"{choice}\"")),
        CaseValueKind.Number => IsPositive ? "a number above 0" : "a number",
        CaseValueKind.WholeNumber => FormattableString.Invariant($"a whole number from {Least ?? long.MinValue} to {Most ?? long.MaxValue}"),
        CaseValueKind.NumberList => "a list of numbers",
        CaseValueKind.NumberMatrix => "a list of rows of numbers",
        CaseValueKind.NameList => "a list of names in quotes",
        _ => "a table of names with numbers",
    };
}

/// <summary>One table of a case file.</summary>
/// <param name="Path">Dotted path; empty for the top.</param>
/// <param name="Meaning">One sentence.</param>
/// <param name="IsRequired">Whether it must stand.</param>
public sealed record CaseTableEntry(string Path, string Meaning, bool IsRequired);

/// <summary>
/// Every key of a case file. The reader works from this table, so that a reference page or a schema made from it cannot say anything else than what
/// is read.
/// </summary>
public static class CaseKeys
{
    /// <summary>All tables, in the order of a case file.</summary>
    public static IReadOnlyList<CaseTableEntry> Tables { get; } =
    [
        new("", "The top of the file.", true),
        new("domain", "Where the walkers can be: one axis or two, each cut into cells.", true),
        new("domain.x", "The first axis.", true),
        new("domain.y", "The second axis; leave it out for one dimension.", false),
        new("energy", "The energy landscape and how strongly walkers are shaken and pulled.", true),
        new("start", "The density at time 0: exactly one of density, gaussian and samples.", true),
        new("start.gaussian", "A normal density.", false),
        new("time", "How far, in which steps, and when to report.", true),
        new("methods", "The methods that advance the density.", false),
        new("ensemble", "The walkers that are to follow the density.", false),
        new("tolerances", "When a step counts as solved.", false),
        new("labels", "Units for axes and tables; nothing is converted.", false),
    ];

    /// <summary>All keys, in the order of a case file.</summary>
    public static IReadOnlyList<CaseKey> All { get; } =
    [
        new("title", CaseValueKind.Text, "A line for the reader, shown on the page.", "\"A bead in a two-well trap\"") { Default = "\"\"" },
        .. Axis("x"),
        .. Axis("y"),
        new("energy.potential", CaseValueKind.Formula, "The energy landscape V, a formula in x (and y) and the constants.", "\"(x^2 - a)^2 + b*x\"")
            { Unit = "energy", IsRequired = true },
        new("energy.temperature", CaseValueKind.Number, "T in units of energy (k_B T): the equilibrium is exp(-V/T).", "0.4")
            { Unit = "energy", IsRequired = true, IsPositive = true },
        new("energy.mobility", CaseValueKind.Number, "M: velocity under a unit force. It only rescales time.", "1.0")
            { Unit = "length^2/(energy time)", Default = "1.0", IsPositive = true },
        new("energy.constants", CaseValueKind.NumberTable, "Numbers that formulas may call by name.", "{ a = 1.0, b = 0.1 }") { Default = "{}" },
        new("start.density", CaseValueKind.Formula, "A formula that is finite and not negative; the program normalises it.", "\"exp(-(x+1)^2/0.08)\"")
            { Excludes = ["start.gaussian", "start.samples"] },
        new("start.samples", CaseValueKind.FilePath, "A file of samples beside the case: CSV with a header x[,y], .npy, or HDF5.", "\"bead-start.csv\"")
            { Excludes = ["start.gaussian", "start.density"] },
        new("start.gaussian.mean", CaseValueKind.NumberList, "Mean, one number an axis.", "[-1.0]") { Unit = "length", IsRequired = true },
        new("start.gaussian.deviation", CaseValueKind.NumberList, "Standard deviation, one number an axis, each above 0.", "[0.2]")
            { Unit = "length", Excludes = ["start.gaussian.covariance"] },
        new("start.gaussian.covariance", CaseValueKind.NumberMatrix, "Covariance matrix, one row an axis: symmetric and positive definite.", "[[0.05, 0.01], [0.01, 0.04]]")
            { Unit = "length^2", Excludes = ["start.gaussian.deviation"] },
        new("time.until", CaseValueKind.Number, "The last time; may be left out where at is given.", "3.0") { Unit = "time", IsPositive = true },
        new("time.step", CaseValueKind.Number, "The step of every stepping method and every sampler.", "0.02") { Unit = "time", IsRequired = true, IsPositive = true },
        new("time.reports", CaseValueKind.WholeNumber, "Number of report times, evenly spaced from 0 to until, both included.", "31")
            { Default = "31", Least = 2, Most = CaseLimits.Reports.Most, Excludes = ["time.at"] },
        new("time.at", CaseValueKind.NumberList, "Report times instead of reports: increasing, none below 0. Time 0 and until are always reported.", "[0, 0.1, 1]")
            { Unit = "time", Excludes = ["time.reports"] },
        new("methods.flow", CaseValueKind.NameList, "Methods that advance the density on the grid.", "[\"exact\", \"jko\", \"split-proximal\", \"split-gradient\"]")
            { Default = "[\"exact\"]" },
        new("ensemble.samplers", CaseValueKind.NameList, "Samplers that advance walkers; none for no ensemble.", "[\"ula\", \"proximal-ula\"]") { Default = "[]" },
        new("ensemble.walkers", CaseValueKind.WholeNumber, "Walkers in each ensemble.", "100000") { Default = "100000", Least = 1, Most = CaseLimits.Walkers.Most },
        new("ensemble.seed", CaseValueKind.WholeNumber, "Seed of the random numbers: the same seed gives the same walkers.", "1")
            { Default = "1", Least = 0, Most = long.MaxValue },
        new("ensemble.gradient_bias", CaseValueKind.NumberList, "Constant error of the gradient that ula-noisy-gradient uses, one number an axis.", "[0.1]")
            { Unit = "energy/length" },
        new("ensemble.gradient_variance", CaseValueKind.Number, "Variance of that gradient's random error on each axis.", "1.0")
            { Unit = "(energy/length)^2", Default = "1.0", IsPositive = true },
        new("ensemble.decrease_after", CaseValueKind.Number, "Steps n0 after which the steps of ula-decreasing begin to shrink: step n is taken in floor((1 + n/n0)^a) parts.", "10.0")
            { Default = "10.0", IsPositive = true },
        new("ensemble.decrease_exponent", CaseValueKind.Number, "The exponent a of that rule, above 0 and at most 1.", "0.5")
            { Default = "0.5", IsPositive = true },
        new("tolerances.dual_gap", CaseValueKind.Number, "Largest duality gap of a certified step in two dimensions, relative to W2^2/(2 step); a step above it ends the method with status 3.", "1e-3")
            { Default = "1e-3", IsPositive = true },
        new("labels.length", CaseValueKind.Text, "Unit of length.", "\"µm\"") { Default = "\"\"" },
        new("labels.energy", CaseValueKind.Text, "Unit of energy.", "\"kT\"") { Default = "\"\"" },
        new("labels.time", CaseValueKind.Text, "Unit of time.", "\"s\"") { Default = "\"\"" },
    ];

    /// <summary>The key of a path; null when there is none.</summary>
    public static CaseKey? Find(string path) => All.FirstOrDefault(key => key.Path == path);

    /// <summary>The table of a path; null when there is none.</summary>
    public static CaseTableEntry? FindTable(string path) => Tables.FirstOrDefault(table => table.Path == path);

    private static CaseKey[] Axis(string name) =>
    [
        new($"domain.{name}.from", CaseValueKind.Number, $"Lower end of {name}.", "-2.5") { Unit = "length", IsRequired = true },
        new($"domain.{name}.to", CaseValueKind.Number, $"Upper end of {name}.", "2.5") { Unit = "length", IsRequired = true },
        new($"domain.{name}.cells", CaseValueKind.WholeNumber, $"Cells along {name}; an even number lets the grid error be estimated.", "512")
            { IsRequired = true, Least = 4, Most = CaseLimits.CellsInOneDimension.Most },
        new($"domain.{name}.ends", CaseValueKind.Choice, "What the ends are: walls, or one point of a circle.", "\"periodic\"")
            { Default = "\"reflecting\"", Choices = ["reflecting", "periodic"] },
    ];
}
