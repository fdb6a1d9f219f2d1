using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Reporting.Figures;

/// <summary>A curve. Points that are NaN break the line; points that a logarithmic axis cannot show are left out.</summary>
/// <param name="Label">Its name in the legend; null keeps it out of the legend.</param>
/// <param name="X">Abscissae.</param>
/// <param name="Y">Ordinates, of the same length.</param>
/// <param name="Look">How it is drawn.</param>
/// <param name="IsStairs">Whether the value is constant between an abscissa and the next, as in a histogram.</param>
public sealed record Curve(string? Label, IReadOnlyList<double> X, IReadOnlyList<double> Y, CurveLook Look, bool IsStairs = false);

/// <summary>The area between two curves.</summary>
/// <param name="Label">Its name in the legend.</param>
/// <param name="X">Abscissae.</param>
/// <param name="Low">Lower ends; null reaches down to the axis.</param>
/// <param name="High">Upper ends.</param>
public sealed record Band(string Label, IReadOnlyList<double> X, IReadOnlyList<double>? Low, IReadOnlyList<double> High);

/// <summary>Words at a point of a plot.</summary>
/// <param name="X">Where.</param>
/// <param name="Y">Where.</param>
/// <param name="Text">The words.</param>
public sealed record PointNote(double X, double Y, string Text);

/// <summary>One set of axes in a figure; see the derived types.</summary>
/// <param name="Title">A short title above it; empty for none.</param>
public abstract record Panel(string Title);

/// <summary>Curves over a common abscissa.</summary>
/// <param name="Title">A short title; empty for none.</param>
/// <param name="XTitle">Quantity and unit along x.</param>
/// <param name="YTitle">Quantity and unit along y.</param>
public sealed record LinePanel(string Title, string XTitle, string YTitle) : Panel(Title)
{
    /// <summary>Curves, drawn in order.</summary>
    public IReadOnlyList<Curve> Curves { get; init; } = [];

    /// <summary>Bands, drawn below the curves.</summary>
    public IReadOnlyList<Band> Bands { get; init; } = [];

    /// <summary>Words inside the plot.</summary>
    public IReadOnlyList<PointNote> Notes { get; init; } = [];

    /// <summary>Short strokes along the x axis, such as walkers.</summary>
    public IReadOnlyList<Curve> Rugs { get; init; } = [];

    /// <summary>Whether x is logarithmic.</summary>
    public bool XIsLogarithmic { get; init; }

    /// <summary>Whether y is logarithmic.</summary>
    public bool YIsLogarithmic { get; init; }

    /// <summary>Least x shown; null goes by the data.</summary>
    public double? XFrom { get; init; }

    /// <summary>Greatest x shown.</summary>
    public double? XTo { get; init; }

    /// <summary>Least y shown; null goes by the data.</summary>
    public double? YFrom { get; init; }

    /// <summary>Greatest y shown.</summary>
    public double? YTo { get; init; }

    /// <summary>Title of a second scale on the right, equal to the left one times <see cref="RightScale"/>; null for none.</summary>
    public string? RightTitle { get; init; }

    /// <summary>Factor from the left scale to the right one.</summary>
    public double RightScale { get; init; } = 1;
}

/// <summary>A 2-D density with level lines, points and arrows.</summary>
/// <param name="Title">A short title; empty for none.</param>
/// <param name="XTitle">Quantity and unit along x.</param>
/// <param name="YTitle">Quantity and unit along y.</param>
/// <param name="Density">The density.</param>
/// <param name="ColorMaximum">Density that has the last colour of the scale; 0 or below has the first.</param>
public sealed record MapPanel(string Title, string XTitle, string YTitle, Density Density, double ColorMaximum) : Panel(Title)
{
    /// <summary>Values whose level lines are drawn, at the cell centres, x fastest; null for none.</summary>
    public IReadOnlyList<double>? Levels { get; init; }

    /// <summary>Which levels.</summary>
    public IReadOnlyList<double> LevelValues { get; init; } = [];

    /// <summary>Points over the map: x.</summary>
    public IReadOnlyList<double> PointsX { get; init; } = [];

    /// <summary>Points over the map: y.</summary>
    public IReadOnlyList<double> PointsY { get; init; } = [];

    /// <summary>Arrows over the map: tail and tip.</summary>
    public IReadOnlyList<(double FromX, double FromY, double ToX, double ToY)> Arrows { get; init; } = [];
}

/// <summary>A row of the legend that no curve makes by itself.</summary>
/// <param name="Label">The words.</param>
/// <param name="Kind">The sign before them.</param>
public sealed record LegendNote(string Label, LegendSign Kind);

/// <summary>Signs of legend rows.</summary>
public enum LegendSign
{
    /// <summary>A level line of the potential.</summary>
    Level,

    /// <summary>A walker.</summary>
    Walker,

    /// <summary>An arrow.</summary>
    Arrow,

    /// <summary>The colour scale of maps.</summary>
    ColorScale,
}

/// <summary>A picture as data: panels in rows under one title, one caption and one legend. <see cref="FigureWriter"/> draws it.</summary>
/// <param name="Name">File name without ending.</param>
/// <param name="Title">Title.</param>
/// <param name="Caption">How to read it, in a sentence or two.</param>
/// <param name="Panels">Panels, row by row; all of one kind.</param>
/// <param name="Columns">Panels in a row.</param>
public sealed record Figure(string Name, string Title, string Caption, IReadOnlyList<Panel> Panels, int Columns = 1)
{
    /// <summary>Panels in a row.</summary>
    public int Columns { get; } = Require.AtLeast(Columns, 1);

    /// <summary>Rows of panels.</summary>
    public int Rows => (Panels.Count + Columns - 1) / Columns;

    /// <summary>Further rows of the legend.</summary>
    public IReadOnlyList<LegendNote> LegendNotes { get; init; } = [];

    /// <summary>What the picture shows in words, for those who cannot see it; defaults to title and caption.</summary>
    public string Description => Title + ". " + Caption;
}
