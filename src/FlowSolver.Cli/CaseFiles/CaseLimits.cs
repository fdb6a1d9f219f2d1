using System.Globalization;
using FlowSolver.Reporting.Samples;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>A limit of what a case may ask for; checked before any memory is taken.</summary>
/// <param name="What">What is limited.</param>
/// <param name="Most">The largest value allowed.</param>
/// <param name="Reason">Why, in a few words.</param>
public sealed record CaseLimit(string What, long Most, string Reason)
{
    /// <summary>The limit for reading, with thousands set apart by commas.</summary>
    public string Shown => Most.ToString("N0", CultureInfo.InvariantCulture);
}

/// <summary>All limits of a case. The reader works from these, so that help and reference pages can print them.</summary>
public static class CaseLimits
{
    /// <summary>Size of the case file.</summary>
    public static CaseLimit FileSize { get; } = new("bytes in a case file", 1_000_000, "a case is a page of text; data belong in a file of samples");

    /// <summary>Cells in one dimension.</summary>
    public static CaseLimit CellsInOneDimension { get; } = new("cells in one dimension", 1_048_576, "a density then takes 8 MB");

    /// <summary>Cells along an axis in two dimensions.</summary>
    public static CaseLimit CellsPerAxis { get; } = new("cells along an axis in two dimensions", 4096, "finer grids give no more digits");

    /// <summary>Cells in all in two dimensions.</summary>
    public static CaseLimit CellsInTwoDimensions { get; } = new("cells in all in two dimensions", 16_777_216, "a density then takes 134 MB");

    /// <summary>Walkers in an ensemble.</summary>
    public static CaseLimit Walkers { get; } = new("walkers in an ensemble", 100_000_000, "an ensemble then takes 0.8 GB an axis");

    /// <summary>Report times.</summary>
    public static CaseLimit Reports { get; } = new("report times", 10_000, "every one of them is written for every method");

    /// <summary>Steps from 0 to the end.</summary>
    public static CaseLimit Steps { get; } = new("steps in all", 10_000_000, "every one of them is a row of steps.csv for every method");

    /// <summary>Rows of a samples file.</summary>
    public static CaseLimit SampleRows { get; } = new("rows in a file of samples", SamplesReader.MostRows, "they are held in memory");

    /// <summary>Every limit, in the order of a case file.</summary>
    public static IReadOnlyList<CaseLimit> All { get; } =
        [FileSize, CellsInOneDimension, CellsPerAxis, CellsInTwoDimensions, Walkers, Reports, Steps, SampleRows];
}
