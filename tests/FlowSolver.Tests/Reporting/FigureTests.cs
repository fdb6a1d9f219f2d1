using System.Xml.Linq;
using FlowSolver.Reporting;
using FlowSolver.Reporting.Figures;

namespace FlowSolver.Tests.Reporting;

public sealed class FigureTests : IDisposable
{
    // FLOWSOLVER_FIGURES names a folder to keep the pictures in, so that a person can look at them.
    private static readonly string? Kept = Environment.GetEnvironmentVariable("FLOWSOLVER_FIGURES");
    private readonly string directory = Directory.CreateTempSubdirectory("flowsolver-figures").FullName;

    public void Dispose() => Directory.Delete(directory, recursive: true);

    private static IReadOnlyList<Figure> Figures(int dimension)
    {
        if (dimension == 1)
            return RunFigures.All(SampleRuns.Line(), SampleRuns.Labels);
        var plane = SampleRuns.Plane();
        return RunFigures.All(plane, SampleRuns.Labels, [SampleRuns.Map(plane, 0, 3)]);
    }

    [Theory]
    [InlineData(1, "densities free-energy distance error-budget")]
    [InlineData(2, "density-maps walkers transport-map free-energy distance error-budget")]
    public void All_ForARun_GivesWellFormedNamedPictures(int dimension, string names)
    {
        var figures = Figures(dimension);
        Assert.Equal(names, string.Join(' ', figures.Select(figure => figure.Name)));
        using var writer = new FigureWriter();
        foreach (var figure in figures)
        {
            var svg = XDocument.Parse(writer.Svg(figure));
            Assert.Equal("svg", svg.Root!.Name.LocalName);
            Assert.Equal(figure.Title, svg.Root.Elements().First(element => element.Name.LocalName == "title").Value);
            var text = string.Join('\n', svg.Descendants().Where(element => element.Name.LocalName == "text").Select(element => element.Value));
            Assert.Contains(figure.Title, text, StringComparison.Ordinal);
            Assert.Contains(figure.Name == "free-energy" ? "F − F_eq (kT)" : "(µm)", text, StringComparison.Ordinal);
            if (Kept is not null)
                writer.Write(figure, Path.Combine(Kept, dimension.ToString(System.Globalization.CultureInfo.InvariantCulture)));
        }
    }

    // Mutation tried: the writer takes it that the drawing library works; fails on the list of files.
    [Fact]
    public void Write_WithoutTheDrawingLibrary_StillGivesSvgAndSaysWhy()
    {
        using var writer = new FigureWriter(null, withoutSkia: true);
        foreach (var figure in Figures(1).Concat(Figures(2)))
        {
            var path = Assert.Single(writer.Write(figure, directory));
            Assert.EndsWith(".svg", path, StringComparison.Ordinal);
            Assert.NotNull(XDocument.Load(path).Root);
            if (Kept is not null)
                writer.Write(figure with { Name = figure.Name + "-nolib" }, Path.Combine(Kept, "nolib"));
        }

        Assert.Contains("PNG and PDF figures were not made", writer.Problem, StringComparison.Ordinal);
    }

    [SkippableFact]
    public void Write_WithTheDrawingLibrary_GivesPixelsAtTwiceTheSizeAndAPdf()
    {
        using var writer = new FigureWriter();
        Skip.If(writer.Problem is not null, writer.Problem ?? "");
        var paths = writer.Write(Figures(1)[0], directory);
        Assert.Equal([".svg", ".png", ".pdf"], paths.Select(Path.GetExtension));
        using var bitmap = SkiaSharp.SKBitmap.Decode(paths[1]);
        Assert.Equal(2 * FigureStyle.Default.Width, bitmap.Width);
        Assert.StartsWith("%PDF", File.ReadAllText(paths[2])[..8], StringComparison.Ordinal);
        var colors = new HashSet<SkiaSharp.SKColor>(bitmap.Pixels);
        Assert.Contains(SkiaSharp.SKColor.Parse(FigureStyle.Default.Exact.Color), colors);
    }

    [Fact]
    public void All_WithNothingToShow_LeavesTheFigureOut()
    {
        var empty = SampleRuns.Line(40, 3) with { Budget = [], Walkers = [], Densities = [], Series = [] };
        Assert.Empty(RunFigures.All(empty, CaseLabels.None));
    }

    [Fact]
    public void Distance_ShowsTheNoiseAsABandAndLeavesOutTheYardstick()
    {
        var panel = (LinePanel)Figures(1).Single(figure => figure.Name == "distance").Panels[0];
        var band = Assert.Single(panel.Bands);
        Assert.Null(band.Low);
        Assert.DoesNotContain(panel.Curves, curve => curve.Label == "exact");
        Assert.Contains(panel.Curves, curve => curve.Label == "grid error of the exact flow");
        Assert.Equal(SampleRuns.Line().Budget.Where(row => row.Sampler == "ula").Select(row => row.Noise95!.Value), band.High);
    }

    // Mutation tried: the reach of the scale made boundless; the curve comes back and the caption says nothing.
    [Fact]
    public void DistanceAndBudget_OverAFineGrid_SayTheGridErrorInsteadOfStretchingTheScale()
    {
        var sample = SampleRuns.Line();
        var fine = sample with
        {
            GridErrors = [.. sample.GridErrors.Select(_ => (double?)2.5e-9)],
            Budget = [.. sample.Budget.Select(row => row with { GridError = 2.5e-9 })],
        };
        var figures = RunFigures.All(fine, SampleRuns.Labels);
        var distance = figures.Single(figure => figure.Name == "distance");
        var panel = (LinePanel)distance.Panels[0];
        Assert.EndsWith("The grid error lies below the scale: at most 2.5e−9 µm.", distance.Caption, StringComparison.Ordinal);
        Assert.DoesNotContain(panel.Curves, curve => curve.Label == "grid error of the exact flow");
        Assert.InRange(panel.YFrom!.Value, 1e-3, 1e-2);
        var budget = figures.Single(figure => figure.Name == "error-budget");
        Assert.EndsWith("The grid's part lies below the scale: at most 2.5e−9 µm.", budget.Caption, StringComparison.Ordinal);
        Assert.All(budget.Panels, part => Assert.DoesNotContain(((LinePanel)part).Curves, curve => curve.Label == "grid"));
    }

    // Held against another decoder. Mutation tried: rows written from the bottom; fails.
    [SkippableFact]
    public void PalettePng_ReadByTheDrawingLibrary_GivesBackEveryPixel()
    {
        using var writer = new FigureWriter();
        Skip.If(writer.Problem is not null, writer.Problem ?? "");
        var palette = Enumerable.Range(0, 256).Select(i => ((byte)i, (byte)(255 - i), (byte)(i / 2))).ToList();
        var indices = Enumerable.Range(0, 70 * 33).Select(i => (byte)(i * 7 + i / 70)).ToArray();
        using var bitmap = SkiaSharp.SKBitmap.Decode(PalettePng.Encode(indices, 70, 33, palette));
        Assert.Equal((70, 33), (bitmap.Width, bitmap.Height));
        for (var i = 0; i < indices.Length; i++)
        {
            var color = bitmap.GetPixel(i % 70, i / 70);
            Assert.Equal(palette[indices[i]], (color.Red, color.Green, color.Blue));
        }
    }

    [Fact]
    public void Looks_TellMethodsApartWithoutColour()
    {
        var style = FigureStyle.Default;
        Assert.Equal(style.Flows.Count, style.Flows.Select(look => string.Join(',', look.Dash)).Distinct().Count());
        Assert.Equal(style.Samplers.Count, style.Samplers.Select(look => look.Marker).Distinct().Count());
        // Lightness of the map falls all the way.
        var luminance = style.MapColors.Select(Luminance).ToList();
        Assert.Equal(luminance.OrderDescending(), luminance);
        // WCAG 2.2, success criterion 1.4.11: graphics at least 3:1 against what lies beside them.
        foreach (var look in style.Flows.Concat(style.Samplers).Append(style.Exact).Append(style.Equilibrium))
            Assert.InRange(Contrast(look.Color, style.Paper), 3, 21);
        Assert.InRange(Contrast(style.Muted, style.Paper), 4.5, 21);
    }

    internal static double Contrast(string first, string second)
    {
        var (a, b) = (Luminance(first), Luminance(second));
        return (Math.Max(a, b) + 0.05) / (Math.Min(a, b) + 0.05);
    }

    // WCAG 2.2, definition of relative luminance.
    private static double Luminance(string color)
    {
        double Part(int at)
        {
            var c = Convert.ToInt32(color.Substring(at, 2), 16) / 255.0;
            return c <= 0.04045 ? c / 12.92 : Math.Pow((c + 0.055) / 1.055, 2.4);
        }

        return 0.2126 * Part(1) + 0.7152 * Part(3) + 0.0722 * Part(5);
    }
}
