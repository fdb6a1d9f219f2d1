namespace FlowSolver.Reporting.Figures;

/// <summary>How a curve is drawn. Colour, dash and marker all tell it apart, so that it can be read without colour.</summary>
/// <param name="Color">Colour as <c>#RRGGBB</c>.</param>
/// <param name="DarkColor">Its counterpart on a dark page.</param>
/// <param name="Width">Line width, in points.</param>
/// <param name="Dash">Dash pattern in multiples of the line width; empty for a solid line.</param>
/// <param name="Marker">Marker at some of the points.</param>
public sealed record CurveLook(string Color, string DarkColor, double Width, IReadOnlyList<double> Dash, CurveMarker Marker = CurveMarker.None);

/// <summary>Shape of a marker.</summary>
public enum CurveMarker
{
    /// <summary>No marker.</summary>
    None,

    /// <summary>A filled circle.</summary>
    Circle,

    /// <summary>A filled square.</summary>
    Square,

    /// <summary>A filled triangle.</summary>
    Triangle,

    /// <summary>A filled diamond.</summary>
    Diamond,

    /// <summary>A cross.</summary>
    Cross,
}

/// <summary>
/// Every choice of look in one place: fonts, sizes, colours, dashes, markers. Change a figure's looks here and nowhere else; <c>with</c> makes a
/// variant for a paper or a talk.
/// </summary>
public sealed record FigureStyle
{
    /// <summary>The looks of the program.</summary>
    public static FigureStyle Default { get; } = new();

    /// <summary>Font of all text in figures.</summary>
    public string Font { get; init; } = "DejaVu Sans";

    /// <summary>Fonts that an SVG viewer may use where <see cref="Font"/> is missing, in CSS notation.</summary>
    public string FontFallback { get; init; } = "Verdana, Geneva, sans-serif";

    /// <summary>Size of tick labels, legend and axis titles, in points of the figure's own size.</summary>
    public double FontSize { get; init; } = 12;

    /// <summary>Size of the title.</summary>
    public double TitleSize { get; init; } = 15;

    /// <summary>Width of a figure. Heights follow from its panels.</summary>
    public double Width { get; init; } = 760;

    /// <summary>Height of the plot area of a figure with one panel.</summary>
    public double SinglePanelHeight { get; init; } = 300;

    /// <summary>Height of the plot area where several rows of panels share a figure.</summary>
    public double SmallPanelHeight { get; init; } = 165;

    /// <summary>Pixels a unit of size in PNG files.</summary>
    public double PixelScale { get; init; } = 2;

    /// <summary>Colour of text and axes.</summary>
    public string Ink { get; init; } = "#1d2126";

    /// <summary>Colour of captions and lesser lines.</summary>
    public string Muted { get; init; } = "#555c66";

    /// <summary>Colour of grid lines.</summary>
    public string GridLine { get; init; } = "#e3e5e8";

    /// <summary>Background.</summary>
    public string Paper { get; init; } = "#ffffff";

    /// <summary>Fill of bands such as the noise floor.</summary>
    public string BandFill { get; init; } = "#c9ced6";

    /// <summary>The yardstick.</summary>
    public CurveLook Exact { get; init; } = new("#1d2126", "#f2f3f5", 2.4, []);

    /// <summary>Equilibrium.</summary>
    public CurveLook Equilibrium { get; init; } = new("#7a828c", "#9aa3ad", 1.4, [1.5, 2]);

    /// <summary>Flow methods in the order of the result. Colours keep apart under the common kinds of colour blindness; dashes differ too.</summary>
    public IReadOnlyList<CurveLook> Flows { get; init; } =
    [
        new("#0f62a6", "#6db3f2", 2, [6, 2.5], CurveMarker.Circle),
        new("#c04a12", "#f39a64", 2, [2.5, 2], CurveMarker.Square),
        new("#00796b", "#4cc9b0", 2, [8, 2, 1.5, 2], CurveMarker.Triangle),
        new("#8a3f96", "#d39be0", 2, [4, 1.5], CurveMarker.Diamond),
        new("#8f6500", "#e0b64a", 2, [10, 3], CurveMarker.Cross),
        new("#a3214f", "#f08bab", 2, [1.2, 1.6], CurveMarker.Circle),
    ];

    /// <summary>Samplers in the order of the result.</summary>
    public IReadOnlyList<CurveLook> Samplers { get; init; } =
    [
        new("#b5178a", "#f28fd6", 1.6, [], CurveMarker.Circle),
        new("#4b6b00", "#b5d45c", 1.6, [], CurveMarker.Triangle),
        new("#0b7f9e", "#63cfe8", 1.6, [], CurveMarker.Diamond),
        new("#7d4a1e", "#d9a878", 1.6, [], CurveMarker.Square),
        new("#5a55b5", "#aaa6f5", 1.6, [], CurveMarker.Cross),
    ];

    /// <summary>Colours of a density map from none to the greatest density: lightness falls all the way, so that it can be read in grey.</summary>
    public IReadOnlyList<string> MapColors { get; init; } = ["#fbfaf7", "#d6e3ee", "#9dc3de", "#5a97c6", "#27659f", "#0c2f5c"];

    /// <summary>The same on a dark page: lightness rises all the way.</summary>
    public IReadOnlyList<string> MapColorsDark { get; init; } = ["#15191e", "#1c3652", "#27608f", "#4a93c9", "#93c6ea", "#f1f8fe"];

    /// <summary>Colour of walkers over a map.</summary>
    public string WalkerColor { get; init; } = "#e07a00";

    /// <summary>Colour of level lines of the potential over a map.</summary>
    public string LevelColor { get; init; } = "#6b6f76";

    /// <summary>Levels of the potential above its least value over a map, in units of T.</summary>
    public IReadOnlyList<double> LevelsInTemperature { get; init; } = [1, 2, 4, 8, 16, 32];

    /// <summary>The look of a method: the yardstick has its own, the others go by their place among their kind.</summary>
    /// <param name="method">Name of the method; <c>exact</c> is the yardstick.</param>
    /// <param name="place">Place among the other methods of its kind, from 0.</param>
    /// <param name="isSampler">Whether it is a sampler.</param>
    public CurveLook LookOf(string method, int place, bool isSampler)
    {
        if (!isSampler && method == "exact")
            return Exact;
        var looks = isSampler ? Samplers : Flows;
        return looks[place % looks.Count];
    }
}
