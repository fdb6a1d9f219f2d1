using OxyPlot;
using OxyPlot.SkiaSharp;

namespace FlowSolver.Reporting.Figures;

/// <summary>Chooses how text is measured: by the font library where the machine has one, by a table of widths otherwise.</summary>
internal static class TextMeasurers
{
    /// <summary>The font library's measure; null where it cannot be loaded, with the reason.</summary>
    public static IRenderContext? TrySkia(FigureStyle style, out string? problem)
    {
        try
        {
            var skia = new SkiaRenderContext { RenderTarget = RenderTarget.VectorGraphic, UseTextShaping = false, DpiScale = 1 };
            var size = skia.MeasureText("0.5", style.Font, style.FontSize, 400);
            if (size.Width > 0)
            {
                problem = null;
                return skia;
            }

            skia.Dispose();
            problem = "the font library found no font";
        }
        catch (Exception error) when (IsMissingLibrary(error))
        {
            problem = Reason(error);
        }

        return null;
    }

    /// <summary>Whether an exception means that native drawing or font libraries are missing.</summary>
    public static bool IsMissingLibrary(Exception error)
        => error is DllNotFoundException or EntryPointNotFoundException or BadImageFormatException or TypeInitializationException;

    /// <summary>The innermost reason, in one line.</summary>
    public static string Reason(Exception error)
    {
        while (error.InnerException is { } inner)
            error = inner;
        var line = error.Message.ReplaceLineEndings("\n").Split('\n')[0];
        return line.TrimEnd('.');
    }
}

/// <summary>
/// Measures text by typical advance widths of a sans-serif font, for machines without a font library. Draws nothing. Widths are in thousandths of
/// the font size, rounded up so that text fits.
/// </summary>
internal sealed class EstimatedTextMeasurer : RenderContextBase
{
    /// <inheritdoc/>
    public override int ClipCount => 0;

    /// <inheritdoc/>
    public override void PushClip(OxyRect clippingRectangle) { }

    /// <inheritdoc/>
    public override void PopClip() { }

    /// <inheritdoc/>
    public override OxySize MeasureText(string text, string fontFamily, double fontSize, double fontWeight)
    {
        if (string.IsNullOrEmpty(text))
            return OxySize.Empty;
        var lines = text.Split('\n');
        var widest = 0.0;
        foreach (var line in lines)
        {
            var width = 0;
            foreach (var c in line)
                width += Width(c);
            widest = Math.Max(widest, width);
        }

        return new OxySize(widest / 1000 * fontSize * (fontWeight > 500 ? 1.1 : 1), lines.Length * fontSize * 1.2);
    }

    /// <inheritdoc/>
    public override void DrawLine(IList<ScreenPoint> points, OxyColor stroke, double thickness, EdgeRenderingMode edgeRenderingMode, double[] dashArray, LineJoin lineJoin) { }

    /// <inheritdoc/>
    public override void DrawPolygon(IList<ScreenPoint> points, OxyColor fill, OxyColor stroke, double thickness, EdgeRenderingMode edgeRenderingMode, double[] dashArray, LineJoin lineJoin) { }

    /// <inheritdoc/>
    public override void DrawText(ScreenPoint p, string text, OxyColor fill, string fontFamily, double fontSize, double fontWeight, double rotation, HorizontalAlignment halign, VerticalAlignment valign, OxySize? maxSize) { }

    private static int Width(char c) => c switch
    {
        'i' or 'j' or 'l' or '\'' or '|' => 290,
        ' ' or '.' or ',' or ':' or ';' or 'I' or '!' or '/' => 340,
        'f' or 't' or 'r' or '(' or ')' or '[' or ']' or '-' => 420,
        'm' or 'w' or 'M' or 'W' or '%' or '@' or '—' => 990,
        '=' or '+' or '<' or '>' or '−' or '×' or '~' => 840,
        >= 'A' and <= 'Z' => 720,
        _ => 640,
    };
}
