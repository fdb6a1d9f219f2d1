namespace FlowSolver.Reporting;

/// <summary>Units as the case names them. They are only shown: nothing is converted.</summary>
/// <param name="Length">Unit of length, such as <c>µm</c>; null where the case names none.</param>
/// <param name="Energy">Unit of energy.</param>
/// <param name="Time">Unit of time.</param>
public sealed record CaseLabels(string? Length = null, string? Energy = null, string? Time = null)
{
    /// <summary>No units named: axes carry the quantity alone.</summary>
    public static CaseLabels None { get; } = new();

    /// <summary>Unit of length; null where there is none.</summary>
    public string? Length { get; } = Clean(Length);

    /// <summary>Unit of energy; null where there is none.</summary>
    public string? Energy { get; } = Clean(Energy);

    /// <summary>Unit of time; null where there is none.</summary>
    public string? Time { get; } = Clean(Time);

    /// <summary>Unit of a density: 1/length in one dimension, 1/length² in two; null where the length has none.</summary>
    public string? Density(int dimension) => Length is null ? null : dimension == 1 ? "1/" + Length : "1/" + Length + "²";

    /// <summary>A quantity with its unit in brackets, as on an axis.</summary>
    public static string WithUnit(string quantity, string? unit) => unit is null ? quantity : quantity + " (" + unit + ")";

    private static string? Clean(string? unit) => string.IsNullOrWhiteSpace(unit) ? null : unit.Trim();
}
