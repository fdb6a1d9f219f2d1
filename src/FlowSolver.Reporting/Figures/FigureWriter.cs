using System.Globalization;
using System.Text;
using OxyPlot;
using OxyPlot.SkiaSharp;
using SkiaSharp;

namespace FlowSolver.Reporting.Figures;

/// <summary>File formats of figures.</summary>
[Flags]
public enum FigureFormats
{
    /// <summary>Scalable, with text as text.</summary>
    Svg = 1,

    /// <summary>Pixels, at <see cref="FigureStyle.PixelScale"/>.</summary>
    Png = 2,

    /// <summary>Scalable, for papers.</summary>
    Pdf = 4,

    /// <summary>All of them.</summary>
    All = Svg | Png | Pdf,
}

/// <summary>
/// Draws figures to SVG, PNG and PDF. SVG needs nothing of the machine; PNG and PDF need the native drawing library and fontconfig, and where they
/// are missing the figure is written as SVG only and the reason is reported.
/// </summary>
public sealed class FigureWriter : IDisposable
{
    private readonly FigureStyle style;
    private readonly SheetPainter painter;
    private readonly IRenderContext measurer;
    private bool skiaWorks;

    /// <summary>Prepares a writer.</summary>
    /// <param name="style">Looks; null takes the default.</param>
    public FigureWriter(FigureStyle? style = null) : this(style, withoutSkia: false) { }

    internal FigureWriter(FigureStyle? style, bool withoutSkia)
    {
        this.style = style ?? FigureStyle.Default;
        painter = new SheetPainter(this.style);
        string? problem = "switched off";
        var skia = withoutSkia ? null : TextMeasurers.TrySkia(this.style, out problem);
        skiaWorks = skia is not null;
        measurer = skia ?? new EstimatedTextMeasurer();
        if (!skiaWorks)
            Problem = "PNG and PDF figures were not made: " + problem + ". SVG figures were. Installing fontconfig and a font such as DejaVu Sans brings them.";
    }

    /// <summary>Why PNG and PDF cannot be made on this machine, as a sentence; null where they can.</summary>
    public string? Problem { get; private set; }

    /// <summary>Writes a figure in the formats asked for and returns the paths.</summary>
    public IReadOnlyList<string> Write(Figure figure, string directory, FigureFormats formats = FigureFormats.All)
    {
        ArgumentNullException.ThrowIfNull(figure);
        ArgumentNullException.ThrowIfNull(directory);
        Directory.CreateDirectory(directory);
        var paths = new List<string>();
        if (formats.HasFlag(FigureFormats.Svg))
        {
            var path = Path.Combine(directory, figure.Name + ".svg");
            File.WriteAllText(path, Svg(figure));
            paths.Add(path);
        }

        try
        {
            if (skiaWorks && formats.HasFlag(FigureFormats.Png))
            {
                var path = Path.Combine(directory, figure.Name + ".png");
                using var stream = File.Create(path);
                WritePng(figure, stream);
                paths.Add(path);
            }

            if (skiaWorks && formats.HasFlag(FigureFormats.Pdf))
            {
                var path = Path.Combine(directory, figure.Name + ".pdf");
                using var stream = File.Create(path);
                WritePdf(figure, stream);
                paths.Add(path);
            }
        }
        catch (Exception error) when (TextMeasurers.IsMissingLibrary(error))
        {
            skiaWorks = false;
            Problem = "PNG and PDF figures were not made: " + TextMeasurers.Reason(error) + ". SVG figures were.";
        }

        return paths;
    }

    /// <summary>The figure as a complete SVG document.</summary>
    public string Svg(Figure figure)
    {
        ArgumentNullException.ThrowIfNull(figure);
        using var stream = new MemoryStream();
        var sheet = painter.Lay(figure, measurer);
        using (var svg = new SvgRenderContext(stream, sheet.Width, sheet.Height, true, measurer, PanelPainter.Color(style.Paper), false))
        {
            sheet.Draw(svg);
            svg.Complete();
            svg.Flush();
        }

        var text = Encoding.UTF8.GetString(stream.ToArray());
        return Tidied(text, figure);
    }

    /// <summary>Writes the figure as PNG.</summary>
    public void WritePng(Figure figure, Stream stream)
    {
        ArgumentNullException.ThrowIfNull(figure);
        ArgumentNullException.ThrowIfNull(stream);
        var sheet = painter.Lay(figure, measurer);
        using var bitmap = new SKBitmap((int)Math.Round(sheet.Width * style.PixelScale), (int)Math.Round(sheet.Height * style.PixelScale));
        using (var canvas = new SKCanvas(bitmap))
        {
            canvas.Clear(SKColor.Parse(style.Paper));
            using var context = new SkiaRenderContext
            {
                RenderTarget = RenderTarget.PixelGraphic,
                SkCanvas = canvas,
                UseTextShaping = true,
                DpiScale = (float)style.PixelScale,
            };
            sheet.Draw(context);
        }

        // Plots are flat colours: without row filters they are packed sooner and no larger.
        using var pixels = bitmap.PeekPixels();
        using var data = pixels.Encode(new SKPngEncoderOptions(SKPngEncoderFilterFlags.NoFilters, 5));
        data.SaveTo(stream);
    }

    /// <summary>Writes the figure as a one-page PDF whose size is the figure's at 96 units an inch.</summary>
    public void WritePdf(Figure figure, Stream stream)
    {
        ArgumentNullException.ThrowIfNull(figure);
        ArgumentNullException.ThrowIfNull(stream);
        const float PointsPerUnit = 0.75f;
        var sheet = painter.Lay(figure, measurer);
        using var document = SKDocument.CreatePdf(stream, new SKDocumentPdfMetadata { Title = figure.Title, Subject = figure.Caption, RasterDpi = 192, EncodingQuality = 101 });
        var canvas = document.BeginPage((float)sheet.Width * PointsPerUnit, (float)sheet.Height * PointsPerUnit);
        using (var context = new SkiaRenderContext
        {
            RenderTarget = RenderTarget.VectorGraphic,
            SkCanvas = canvas,
            UseTextShaping = true,
            DpiScale = PointsPerUnit,
        })
        {
            sheet.Draw(context);
        }

        document.EndPage();
        document.Close();
    }

    /// <summary>Lets go of the font library.</summary>
    public void Dispose() => (measurer as IDisposable)?.Dispose();

    // Fonts to fall back on and a name for screen readers, both beyond what the drawing library writes; and no byte-order mark and no reference to
    // a document type that a reader might fetch.
    private string Tidied(string svg, Figure figure)
    {
        svg = svg.Replace("font-family=\"" + style.Font + "\"", "font-family=\"'" + style.Font + "', " + style.FontFallback + "\"", StringComparison.Ordinal);
        var open = svg.IndexOf("<svg", StringComparison.Ordinal);
        var close = svg.IndexOf('>', open);
        return string.Create(CultureInfo.InvariantCulture,
            $"<?xml version=\"1.0\" encoding=\"utf-8\"?>\n{svg[open..close]} role=\"img\"><title>{Escaped(figure.Title)}</title><desc>{Escaped(figure.Caption)}</desc>{svg[(close + 1)..].ReplaceLineEndings("\n")}");
    }

    private static string Escaped(string text) => System.Security.SecurityElement.Escape(text);
}
