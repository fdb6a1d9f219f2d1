using OxyPlot;

namespace FlowSolver.Reporting.Figures;

/// <summary>Lays out a figure: title, caption, legend, then the panels in rows whose plot areas have equal sizes.</summary>
internal sealed class SheetPainter(FigureStyle style)
{
    private const double Edge = 14;
    private const double SignWidth = 40;

    // Room around a plot area for numbers and markers that stand over its edge; plots clip what they draw to their own rectangle.
    private const double Slack = 12;
    private const double Gap = 20;

    /// <summary>A figure that is ready to be drawn at its own size.</summary>
    /// <param name="Width">Width.</param>
    /// <param name="Height">Height.</param>
    /// <param name="Draw">Draws it.</param>
    public sealed record Sheet(double Width, double Height, Action<IRenderContext> Draw);

    private sealed record Entry(string Label, double Width, Action<IRenderContext, double, double> Sign);

    public Sheet Lay(Figure figure, IRenderContext measurer)
    {
        var inner = style.Width - 2 * Edge;
        var caption = Wrapped(figure.Caption, inner, measurer);
        var rows = LegendRows(figure, inner, measurer);
        var line = style.FontSize * 1.45;
        var top = Edge + style.TitleSize * 1.5 + caption.Count * line + 4;
        var panelsTop = top + rows.Count * line * 1.15 + (rows.Count > 0 ? 6 : 0);
        var titles = figure.Panels.Any(panel => panel.Title.Length > 0);
        var titleHeight = titles ? style.FontSize * 1.7 : 6;
        var right = figure.Panels.Any(panel => panel is LinePanel { RightTitle: not null }) ? 70.0 : 8;
        const double Left = 66;
        const double Bottom = 44;
        var between = figure.Panels.Any(panel => panel is LinePanel) ? 18.0 : 14;
        var plotWidth = (style.Width - 2 * Edge - Left - right - (figure.Columns - 1) * between) / figure.Columns;
        var plotHeight = PlotHeight(figure, plotWidth);
        var height = panelsTop + figure.Rows * (titleHeight + plotHeight) + (figure.Rows - 1) * between + Bottom + Edge;
        return new Sheet(style.Width, height, Draw);

        void Draw(IRenderContext context)
        {
            var y = Edge;
            Text(context, Edge, y, figure.Title, style.TitleSize, bold: true, style.Ink);
            y += style.TitleSize * 1.5;
            foreach (var words in caption)
            {
                Text(context, Edge, y, words, style.FontSize, bold: false, style.Muted);
                y += line;
            }

            y = top;
            foreach (var row in rows)
            {
                var x = Edge;
                foreach (var entry in row)
                {
                    entry.Sign(context, x, y + style.FontSize * 0.62);
                    Text(context, x + SignWidth + 6, y, entry.Label, style.FontSize, bold: false, style.Ink);
                    x += entry.Width + Gap;
                }

                y += line * 1.15;
            }

            for (var p = 0; p < figure.Panels.Count; p++)
            {
                var (row, column) = (p / figure.Columns, p % figure.Columns);
                var isBottom = p + figure.Columns >= figure.Panels.Count;
                var plotLeft = Edge + Left + column * (plotWidth + between);
                var plotTop = panelsTop + row * (titleHeight + plotHeight + between) + titleHeight;
                var panel = figure.Panels[p];
                if (panel.Title.Length > 0)
                    Text(context, plotLeft, plotTop - titleHeight + 2, panel.Title, style.FontSize, bold: true, style.Ink);
                var margins = new PanelPainter.Margins(column == 0 ? Left : Slack, Slack, column == figure.Columns - 1 ? Math.Max(right, Slack) : Slack, isBottom ? Bottom : Slack);
                var plot = new PanelPainter(style).Paint(panel, margins, isBottom, column == 0);
                ((IPlotModel)plot).Update(true);
                ((IPlotModel)plot).Render(context, new OxyRect(
                    plotLeft - margins.Left, plotTop - margins.Top, margins.Left + plotWidth + margins.Right, margins.Top + plotHeight + margins.Bottom));
                var (xTitle, yTitle, rightTitle) = panel switch
                {
                    LinePanel lines => (lines.XTitle, lines.YTitle, lines.RightTitle),
                    MapPanel map => (map.XTitle, map.YTitle, null),
                    _ => ("", "", null),
                };
                if (isBottom)
                    AxisTitle(context, plotLeft + plotWidth / 2, plotTop + plotHeight + Bottom - 10, xTitle, 0);
                if (column == 0)
                    AxisTitle(context, Edge + style.FontSize / 2, plotTop + plotHeight / 2, yTitle, -90);
                if (rightTitle is not null && column == figure.Columns - 1)
                    AxisTitle(context, style.Width - Edge - style.FontSize / 2, plotTop + plotHeight / 2, rightTitle, -90);
            }
        }
    }

    private void AxisTitle(IRenderContext context, double x, double y, string text, double rotation)
        => context.DrawText(new ScreenPoint(x, y), text, PanelPainter.Color(style.Ink), style.Font, style.FontSize, 400, rotation, HorizontalAlignment.Center, VerticalAlignment.Middle, null);

    private double PlotHeight(Figure figure, double plotWidth)
    {
        // A map keeps the shape of its domain as far as a page allows.
        if (figure.Panels.OfType<MapPanel>().FirstOrDefault() is { } map)
        {
            var grid = map.Density.Grid;
            var shape = grid.Y!.Interval.Length / grid.X.Interval.Length;
            return Math.Clamp(plotWidth * shape, 0.4 * plotWidth, 1.2 * plotWidth);
        }

        return figure.Rows == 1 && figure.Columns == 1 ? style.SinglePanelHeight : style.SmallPanelHeight * (figure.Rows == 1 ? 1.3 : 1);
    }

    private List<List<Entry>> LegendRows(Figure figure, double width, IRenderContext measurer)
    {
        var entries = new List<Entry>();
        var seen = new HashSet<string>();
        foreach (var panel in figure.Panels.OfType<LinePanel>())
        {
            foreach (var curve in panel.Curves.Where(curve => curve.Label is not null && seen.Add(curve.Label)))
                entries.Add(Make(curve.Label!, (context, x, y) => DrawCurveSign(context, x, y, curve.Look)));
            foreach (var band in panel.Bands.Where(band => seen.Add(band.Label)))
            {
                entries.Add(Make(band.Label, (context, x, y) => context.DrawRectangle(
                    new OxyRect(x, y - 6, SignWidth, 12), OxyColor.FromAColor(150, PanelPainter.Color(style.BandFill)), OxyColors.Undefined, 0, EdgeRenderingMode.Automatic)));
            }

            foreach (var rug in panel.Rugs.Where(rug => rug.Label is not null && seen.Add(rug.Label)))
                entries.Add(Make(rug.Label!, (context, x, y) => DrawRugSign(context, x, y, rug.Look)));
        }

        foreach (var note in figure.LegendNotes)
            entries.Add(Make(note.Label, (context, x, y) => DrawNoteSign(context, x, y, note.Kind)));
        var rows = new List<List<Entry>>();
        var used = double.PositiveInfinity;
        foreach (var entry in entries)
        {
            if (used + entry.Width > width)
            {
                rows.Add([]);
                used = 0;
            }

            rows[^1].Add(entry);
            used += entry.Width + Gap;
        }

        return rows;

        Entry Make(string label, Action<IRenderContext, double, double> sign)
            => new(label, SignWidth + 6 + measurer.MeasureText(label, style.Font, style.FontSize, 400).Width, sign);
    }

    private static void DrawCurveSign(IRenderContext context, double x, double y, CurveLook look)
    {
        var color = PanelPainter.Color(look.Color);
        double[]? dash = look.Dash.Count > 0 ? [.. look.Dash] : null;
        context.DrawLine([new ScreenPoint(x, y), new ScreenPoint(x + SignWidth, y)], color, look.Width, EdgeRenderingMode.Automatic, dash, LineJoin.Round);
        if (look.Marker != CurveMarker.None)
        {
            context.DrawMarker(
                new ScreenPoint(x + SignWidth / 2, y), PanelPainter.Marker(look.Marker), null, 3.4, color, color,
                look.Marker == CurveMarker.Cross ? 1.5 : 0, EdgeRenderingMode.Automatic);
        }
    }

    private static void DrawRugSign(IRenderContext context, double x, double y, CurveLook look)
    {
        for (var i = 0; i < 7; i++)
        {
            var at = x + 2 + i * (SignWidth - 4) / 6;
            context.DrawLine([new ScreenPoint(at, y - 4), new ScreenPoint(at, y + 4)], PanelPainter.Color(look.Color), 1, EdgeRenderingMode.Automatic, null, LineJoin.Miter);
        }
    }

    private void DrawNoteSign(IRenderContext context, double x, double y, LegendSign kind)
    {
        switch (kind)
        {
            case LegendSign.Level:
                context.DrawLine([new ScreenPoint(x, y), new ScreenPoint(x + SignWidth, y)], PanelPainter.Color(style.LevelColor), 1, EdgeRenderingMode.Automatic, null, LineJoin.Miter);
                break;
            case LegendSign.Walker:
                for (var i = 0; i < 3; i++)
                {
                    context.DrawMarker(
                        new ScreenPoint(x + 6 + 11 * i, y), MarkerType.Circle, null, 2.4, PanelPainter.Color(style.WalkerColor), PanelPainter.Color(style.Paper), 0.5, EdgeRenderingMode.Automatic);
                }

                break;
            case LegendSign.Arrow:
                var color = PanelPainter.Color(style.WalkerColor);
                context.DrawLine([new ScreenPoint(x + 2, y), new ScreenPoint(x + SignWidth - 6, y)], color, 1.3, EdgeRenderingMode.Automatic, null, LineJoin.Miter);
                context.DrawPolygon(
                    [new ScreenPoint(x + SignWidth - 1, y), new ScreenPoint(x + SignWidth - 8, y - 3.5), new ScreenPoint(x + SignWidth - 8, y + 3.5)],
                    color, OxyColors.Undefined, 0, EdgeRenderingMode.Automatic, null, LineJoin.Miter);
                break;
            default:
                var palette = OxyPalette.Interpolate(17, [.. style.MapColors.Select(PanelPainter.Color)]);
                for (var i = 0; i < palette.Colors.Count; i++)
                {
                    context.DrawRectangle(
                        new OxyRect(x + i * SignWidth / 17, y - 6, SignWidth / 17 + 0.4, 12), palette.Colors[i], OxyColors.Undefined, 0, EdgeRenderingMode.PreferSpeed);
                }

                context.DrawRectangle(new OxyRect(x, y - 6, SignWidth, 12), OxyColors.Undefined, PanelPainter.Color(style.Muted), 0.6, EdgeRenderingMode.Automatic);
                break;
        }
    }

    private void Text(IRenderContext context, double x, double y, string text, double size, bool bold, string color)
        => context.DrawText(new ScreenPoint(x, y), text, PanelPainter.Color(color), style.Font, size, bold ? 700 : 400, 0, HorizontalAlignment.Left, VerticalAlignment.Top, null);

    private List<string> Wrapped(string text, double width, IRenderContext measurer)
    {
        var lines = new List<string>();
        var line = "";
        foreach (var word in text.Split(' ', StringSplitOptions.RemoveEmptyEntries))
        {
            var longer = line.Length == 0 ? word : line + " " + word;
            if (line.Length > 0 && measurer.MeasureText(longer, style.Font, style.FontSize, 400).Width > width)
            {
                lines.Add(line);
                line = word;
            }
            else
            {
                line = longer;
            }
        }

        if (line.Length > 0)
            lines.Add(line);
        return lines;
    }
}
