using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Tables;

namespace FlowSolver.Reporting.Page;

/// <summary>How a verdict reads at a glance.</summary>
public enum VerdictTone
{
    /// <summary>Nothing to worry about.</summary>
    Sound,

    /// <summary>Something is off, and the page says what.</summary>
    Attention,

    /// <summary>Something could not be trusted or did not finish.</summary>
    Failed,
}

/// <summary>What was found, in words.</summary>
/// <param name="Tone">At a glance.</param>
/// <param name="Headline">One sentence.</param>
/// <param name="Reasons">One sentence or two for each method or item, most important first.</param>
public sealed record Verdict(VerdictTone Tone, string Headline, IReadOnlyList<string> Reasons)
{
    /// <summary>A word or two before the headline, such as <c>a comparison</c>; null goes by the tone.</summary>
    public string? Word { get; init; }
}

/// <summary>A number that a reader wants first.</summary>
/// <param name="Label">What it is.</param>
/// <param name="Value">The number, as it stands in the tables.</param>
/// <param name="Unit">Its unit; null where there is none.</param>
/// <param name="Note">A few words on where it belongs; null for none.</param>
public sealed record KeyNumber(string Label, double Value, string? Unit = null, string? Note = null);

/// <summary>
/// A page as data: what was asked, what was found, then sections. The same frame serves runs, audits, convergence and relaxation studies and
/// comparisons of runs; <see cref="PageWriter"/> turns it into one self-contained file.
/// </summary>
/// <param name="Kind">What made it, such as <c>run</c> or <c>audit</c>.</param>
/// <param name="Title">Title.</param>
/// <param name="Question">What was asked, in a sentence or two.</param>
/// <param name="Verdict">What was found.</param>
/// <param name="KeyNumbers">Numbers that a reader wants first.</param>
/// <param name="Sections">The rest, in reading order.</param>
public sealed record PageModel(
    string Kind, string Title, string Question, Verdict Verdict, IReadOnlyList<KeyNumber> KeyNumbers, IReadOnlyList<PageSection> Sections);

/// <summary>A part of a page; see the derived types.</summary>
/// <param name="Title">Heading.</param>
/// <param name="Lead">A sentence under the heading; empty for none.</param>
public abstract record PageSection(string Title, string Lead);

/// <summary>Paragraphs.</summary>
public sealed record TextSection(string Title, IReadOnlyList<string> Paragraphs) : PageSection(Title, "");

/// <summary>A table. Numbers are shown rounded and carry their exact value.</summary>
/// <param name="Title">Heading.</param>
/// <param name="Lead">A sentence under the heading.</param>
/// <param name="Table">The table.</param>
/// <param name="IsFolded">Whether it is shown only when asked for.</param>
public sealed record TableSection(string Title, string Lead, Table Table, bool IsFolded = false) : PageSection(Title, Lead);

/// <summary>An interactive chart of curves.</summary>
/// <param name="Title">Heading.</param>
/// <param name="Lead">How to read it.</param>
/// <param name="Chart">The chart.</param>
public sealed record ChartSection(string Title, string Lead, LinePanel Chart) : PageSection(Title, Lead);

/// <summary>A still picture.</summary>
/// <param name="Figure">The picture; its title and caption become heading and lead.</param>
public sealed record PictureSection(Figure Figure) : PageSection(Figure.Title, Figure.Caption);

/// <summary>Warnings and failures, one sentence each.</summary>
/// <param name="Title">Heading.</param>
/// <param name="Lead">A sentence under the heading.</param>
/// <param name="Remarks">The remarks; a failure is marked as one.</param>
public sealed record RemarksSection(string Title, string Lead, IReadOnlyList<(string Text, bool IsFailure)> Remarks) : PageSection(Title, Lead);

/// <summary>Names and values, such as provenance.</summary>
/// <param name="Title">Heading.</param>
/// <param name="Facts">Names and values.</param>
/// <param name="Text">Text to be shown letter by letter below, such as a case file; null for none.</param>
public sealed record FactsSection(string Title, IReadOnlyList<(string Name, string Value)> Facts, string? Text = null) : PageSection(Title, "");

/// <summary>The part of a run's page in which a slider moves density, readouts and error budget through time together.</summary>
/// <param name="Title">Heading.</param>
/// <param name="Lead">How to use it.</param>
/// <param name="Data">What it shows.</param>
public sealed record ExplorerSection(string Title, string Lead, RunExplorer Data) : PageSection(Title, Lead);
