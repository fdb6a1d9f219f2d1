using OxyPlot;
using OxyPlot.Annotations;
using OxyPlot.Axes;
using OxyPlot.Series;

namespace FlowSolver.Reporting.Figures;

/// <summary>Turns one panel into a plot.</summary>
internal sealed class PanelPainter(FigureStyle style)
{
    // A logarithmic axis shows at most this many decades below the greatest value: what lies lower is rounding.
    private const double GreatestSpan = 1e7;

    /// <summary>Margins around the plot area.</summary>
    /// <param name="Left">Left.</param>
    /// <param name="Top">Above.</param>
    /// <param name="Right">Right.</param>
    /// <param name="Bottom">Below.</param>
    public readonly record struct Margins(double Left, double Top, double Right, double Bottom);

    /// <summary>Makes the plot.</summary>
    /// <param name="panel">The panel.</param>
    /// <param name="margins">Room for axes around the plot area.</param>
    /// <param name="showsX">Whether the x axis carries numbers here. Titles of axes are the sheet's business.</param>
    /// <param name="showsY">Whether the y axis does.</param>
    public PlotModel Paint(Panel panel, Margins margins, bool showsX, bool showsY)
    {
        var plot = new PlotModel
        {
            DefaultFont = style.Font,
            DefaultFontSize = style.FontSize,
            TextColor = Color(style.Ink),
            PlotAreaBorderColor = Color(style.Muted),
            PlotAreaBorderThickness = new OxyThickness(0.8),
            PlotMargins = new OxyThickness(margins.Left, margins.Top, margins.Right, margins.Bottom),
            Padding = new OxyThickness(0),
            Background = OxyColors.Undefined,
            IsLegendVisible = false,
        };
        if (panel is LinePanel lines)
            PaintLines(plot, lines, showsX, showsY);
        else if (panel is MapPanel map)
            PaintMap(plot, map, showsX, showsY);
        return plot;
    }

    internal static OxyColor Color(string text) => OxyColor.Parse(text);

    internal static MarkerType Marker(CurveMarker marker) => marker switch
    {
        CurveMarker.Circle => MarkerType.Circle,
        CurveMarker.Square => MarkerType.Square,
        CurveMarker.Triangle => MarkerType.Triangle,
        CurveMarker.Diamond => MarkerType.Diamond,
        CurveMarker.Cross => MarkerType.Cross,
        _ => MarkerType.None,
    };

    private void PaintLines(PlotModel plot, LinePanel panel, bool showsX, bool showsY)
    {
        var x = MakeAxis(panel.XIsLogarithmic, AxisPosition.Bottom, showsX);
        var y = MakeAxis(panel.YIsLogarithmic, AxisPosition.Left, showsY);
        var ordinates = panel.Curves.SelectMany(curve => curve.Y).Concat(panel.Bands.SelectMany(band => band.High));
        var (low, high) = Range(ordinates, panel.YIsLogarithmic);
        (y.Minimum, y.Maximum) = (panel.YFrom ?? low, panel.YTo ?? high);
        if (!panel.XIsLogarithmic && panel.XFrom is null && panel.XTo is null)
            x.MinimumPadding = x.MaximumPadding = 0.012;
        if (panel.XFrom is { } from)
            x.Minimum = from;
        if (panel.XTo is { } to)
            x.Maximum = to;
        if (panel.XIsLogarithmic && (panel.XFrom is null || panel.XTo is null))
        {
            var (least, greatest) = Range(panel.Curves.SelectMany(curve => curve.X), true);
            (x.Minimum, x.Maximum) = (panel.XFrom ?? least, panel.XTo ?? greatest);
        }

        plot.Axes.Add(x);
        plot.Axes.Add(y);
        if (panel.RightTitle is not null)
        {
            var right = MakeAxis(panel.YIsLogarithmic, AxisPosition.Right, true);
            right.Key = "right";
            right.MajorGridlineStyle = LineStyle.None;
            (right.Minimum, right.Maximum) = (y.Minimum * panel.RightScale, y.Maximum * panel.RightScale);
            plot.Axes.Add(right);
        }

        foreach (var band in panel.Bands)
        {
            var area = new AreaSeries { Fill = OxyColor.FromAColor(150, Color(style.BandFill)), Color = OxyColors.Undefined, StrokeThickness = 0 };
            for (var i = 0; i < band.X.Count; i++)
            {
                if (!double.IsFinite(band.High[i]) || (panel.YIsLogarithmic && band.High[i] <= 0))
                    continue;
                area.Points.Add(new DataPoint(band.X[i], band.High[i]));
                area.Points2.Add(new DataPoint(band.X[i], band.Low is null ? y.Minimum : Math.Max(band.Low[i], y.Minimum)));
            }

            plot.Series.Add(area);
        }

        foreach (var curve in panel.Curves)
            plot.Series.Add(MakeSeries(curve, panel));
        for (var i = 0; i < panel.Rugs.Count; i++)
            plot.Series.Add(MakeRug(panel.Rugs[i], i, y));
        foreach (var note in panel.Notes)
        {
            plot.Annotations.Add(new TextAnnotation
            {
                Text = note.Text,
                TextPosition = new DataPoint(note.X, note.Y),
                Stroke = OxyColors.Undefined,
                StrokeThickness = 0,
                Background = OxyColor.FromAColor(210, Color(style.Paper)),
                TextHorizontalAlignment = HorizontalAlignment.Left,
                TextVerticalAlignment = VerticalAlignment.Middle,
            });
        }
    }

    private static LineSeries MakeSeries(Curve curve, LinePanel panel)
    {
        var color = Color(curve.Look.Color);
        var series = curve.IsStairs ? new StairStepSeries { VerticalStrokeThickness = curve.Look.Width } : new LineSeries();
        series.Color = color;
        series.StrokeThickness = curve.Look.Width;
        series.LineJoin = LineJoin.Round;
        series.LineStyle = LineStyle.Solid;
        if (curve.Look.Dash.Count > 0)
            series.Dashes = [.. curve.Look.Dash];
        var step = Math.Max(1, (curve.X.Count + 23) / 24);
        if (curve.Look.Marker != CurveMarker.None && !curve.IsStairs && curve.X.Count <= 60)
        {
            series.MarkerType = Marker(curve.Look.Marker);
            series.MarkerSize = 3.2;
            series.MarkerFill = color;
            series.MarkerStroke = color;
            series.MarkerStrokeThickness = curve.Look.Marker == CurveMarker.Cross ? 1.5 : 0;
            series.MarkerResolution = step > 1 ? 8 : 0;
        }

        for (var i = 0; i < curve.X.Count; i++)
        {
            var shown = double.IsFinite(curve.Y[i]) && (!panel.YIsLogarithmic || curve.Y[i] > 0) && (!panel.XIsLogarithmic || curve.X[i] > 0);
            series.Points.Add(shown ? new DataPoint(curve.X[i], curve.Y[i]) : DataPoint.Undefined);
        }

        return series;
    }

    private static LineSeries MakeRug(Curve rug, int row, Axis y)
    {
        var unit = y.Maximum - y.Minimum;
        var (low, high) = (y.Minimum + unit * (0.012 + 0.05 * row), y.Minimum + unit * (0.047 + 0.05 * row));
        var series = new LineSeries { Color = OxyColor.FromAColor(120, Color(rug.Look.Color)), StrokeThickness = 0.9, LineStyle = LineStyle.Solid };
        foreach (var position in rug.X)
        {
            series.Points.Add(new DataPoint(position, low));
            series.Points.Add(new DataPoint(position, high));
            series.Points.Add(DataPoint.Undefined);
        }

        return series;
    }

    private void PaintMap(PlotModel plot, MapPanel panel, bool showsX, bool showsY)
    {
        var grid = panel.Density.Grid;
        var (gx, gy) = (grid.X, grid.Y!);
        var x = MakeAxis(false, AxisPosition.Bottom, showsX);
        var y = MakeAxis(false, AxisPosition.Left, showsY);
        (x.Minimum, x.Maximum, y.Minimum, y.Maximum) = (gx.Interval.From, gx.Interval.To, gy.Interval.From, gy.Interval.To);
        x.MajorGridlineStyle = y.MajorGridlineStyle = LineStyle.None;
        plot.Axes.Add(x);
        plot.Axes.Add(y);
        plot.Annotations.Add(new ImageAnnotation
        {
            ImageSource = Picture(panel),
            X = new PlotLength(gx.Interval.From, PlotLengthUnit.Data),
            Y = new PlotLength(gy.Interval.From, PlotLengthUnit.Data),
            Width = new PlotLength(gx.Interval.Length, PlotLengthUnit.Data),
            Height = new PlotLength(gy.Interval.Length, PlotLengthUnit.Data),
            HorizontalAlignment = HorizontalAlignment.Left,
            VerticalAlignment = VerticalAlignment.Bottom,
            Interpolate = false,
            Layer = AnnotationLayer.BelowAxes,
        });
        if (panel.Levels is not null)
            plot.Series.Add(MakeLevels(panel, gx, gy));
        if (panel.PointsX.Count > 0)
        {
            var points = new LineSeries
            {
                LineStyle = LineStyle.None,
                MarkerType = MarkerType.Circle,
                MarkerSize = 1.4,
                MarkerFill = OxyColor.FromAColor(215, Color(style.WalkerColor)),
                MarkerStrokeThickness = 0,
            };
            for (var i = 0; i < panel.PointsX.Count; i++)
                points.Points.Add(new DataPoint(panel.PointsX[i], panel.PointsY[i]));
            plot.Series.Add(points);
        }

        foreach (var (fromX, fromY, toX, toY) in panel.Arrows)
        {
            plot.Annotations.Add(new ArrowAnnotation
            {
                StartPoint = new DataPoint(fromX, fromY),
                EndPoint = new DataPoint(toX, toY),
                Color = Color(style.WalkerColor),
                StrokeThickness = 1.2,
                HeadLength = 5,
                HeadWidth = 3,
            });
        }
    }

    // One pixel a cell; the upper row of the picture is the last row of cells.
    private OxyImage Picture(MapPanel panel)
    {
        var grid = panel.Density.Grid;
        var palette = OxyPalette.Interpolate(256, [.. style.MapColors.Select(Color)]).Colors.Select(color => (color.R, color.G, color.B)).ToList();
        var greatest = panel.ColorMaximum > 0 ? panel.ColorMaximum : 1;
        var indices = new byte[grid.CellCount];
        for (var row = 0; row < grid.Ny; row++)
        {
            for (var i = 0; i < grid.Nx; i++)
                indices[(grid.Ny - 1 - row) * grid.Nx + i] = (byte)Math.Round(255 * Math.Clamp(panel.Density.Values[row * grid.Nx + i] / greatest, 0, 1));
        }

        return new OxyImage(PalettePng.Encode(indices, grid.Nx, grid.Ny, palette));
    }

    private ContourSeries MakeLevels(MapPanel panel, Grids.Axis gx, Grids.Axis gy)
    {
        // Level lines of a smooth function need no more than this many points a side.
        var strideX = Math.Max(1, gx.Cells / 128);
        var strideY = Math.Max(1, gy.Cells / 128);
        var columns = Picked(gx, strideX);
        var rows = Picked(gy, strideY);
        var values = new double[columns.Length, rows.Length];
        for (var j = 0; j < rows.Length; j++)
        {
            for (var i = 0; i < columns.Length; i++)
                values[i, j] = panel.Levels![rows[j] * gx.Cells + columns[i]];
        }

        return new ContourSeries
        {
            ColumnCoordinates = [.. columns.Select(gx.Center)],
            RowCoordinates = [.. rows.Select(gy.Center)],
            Data = values,
            ContourLevels = [.. panel.LevelValues],
            ContourColors = [.. panel.LevelValues.Select(_ => OxyColor.FromAColor(190, Color(style.LevelColor)))],
            Color = Color(style.LevelColor),
            StrokeThickness = 0.8,
            LineStyle = LineStyle.Solid,
            LabelStep = int.MaxValue,
            LabelBackground = OxyColors.Undefined,
            FontSize = 0.1,
            TextColor = OxyColors.Transparent,
        };

        static int[] Picked(Grids.Axis axis, int stride)
        {
            var picked = new List<int>();
            for (var i = 0; i < axis.Cells; i += stride)
                picked.Add(i);
            if (picked[^1] != axis.Cells - 1)
                picked.Add(axis.Cells - 1);
            return [.. picked];
        }
    }

    private Axis MakeAxis(bool logarithmic, AxisPosition position, bool showsLabels)
    {
        Axis axis = logarithmic
            ? new LogarithmicAxis { PowerPadding = false, LabelFormatter = Tick }
            : new LinearAxis { LabelFormatter = Tick };
        axis.Position = position;
        axis.FontSize = style.FontSize;
        axis.AxislineStyle = LineStyle.None;
        axis.TicklineColor = Color(style.Muted);
        axis.TickStyle = TickStyle.Outside;
        axis.MajorTickSize = 4;
        axis.MinorTickSize = logarithmic ? 2 : 0;
        axis.MajorGridlineStyle = LineStyle.Solid;
        axis.MajorGridlineColor = Color(style.GridLine);
        axis.MajorGridlineThickness = 0.8;
        axis.MinimumPadding = 0;
        axis.MaximumPadding = 0;
        axis.IntervalLength = position is AxisPosition.Left or AxisPosition.Right ? 40 : 70;
        axis.TextColor = showsLabels ? Color(style.Ink) : OxyColors.Transparent;
        return axis;
    }

    /// <summary>A tick's number: plain where that is short, a power of ten otherwise.</summary>
    internal static string Tick(double value)
    {
        if (Math.Abs(value) < 1e-300)
            return "0";
        var text = Numbers.Short(value, 5);
        var size = Math.Abs(value);
        var power = text.IndexOf('e', StringComparison.Ordinal);
        if (power < 0 && size < 1e-3)
        {
            text = value.ToString("0.####e0", System.Globalization.CultureInfo.InvariantCulture);
            power = text.IndexOf('e', StringComparison.Ordinal);
        }

        if (power < 0)
            return text.Replace('-', '−');
        var mantissa = text[..power];
        return (mantissa == "1" ? "" : mantissa.Replace('-', '−') + "·") + "10" + Raised(text[(power + 1)..]);

        static string Raised(string digits)
            => string.Concat(digits.Select(c => c == '-' ? '⁻' : "⁰¹²³⁴⁵⁶⁷⁸⁹"[c - '0']));
    }

    /// <summary>The range that holds all values, widened a little; on a logarithmic scale whole decades are not forced.</summary>
    internal static (double Low, double High) Range(IEnumerable<double> values, bool logarithmic)
    {
        var (low, high) = (double.PositiveInfinity, double.NegativeInfinity);
        foreach (var value in values)
        {
            if (!double.IsFinite(value) || (logarithmic && value <= 0))
                continue;
            (low, high) = (Math.Min(low, value), Math.Max(high, value));
        }

        if (!double.IsFinite(low))
            return logarithmic ? (0.1, 10) : (0, 1);
        if (logarithmic)
        {
            low = Math.Max(low, high / GreatestSpan);
            return (low / 1.6, high * 1.6);
        }

        var pad = high > low ? 0.06 * (high - low) : Math.Max(1e-3, Math.Abs(high) * 0.1);
        return (low >= 0 && low < 0.5 * high ? 0 : low - pad, high + pad);
    }
}
