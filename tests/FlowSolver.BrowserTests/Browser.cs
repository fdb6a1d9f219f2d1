using FlowSolver.Reporting;
using FlowSolver.Tests.Reporting;
using Microsoft.Playwright;

namespace FlowSolver.BrowserTests;

/// <summary>One browser and one set of written runs for all tests.</summary>
public sealed class Browser : IAsyncLifetime
{
    private static readonly string Executable = Environment.GetEnvironmentVariable("FLOWSOLVER_BROWSER") ?? "/usr/bin/chromium";
    private readonly string directory = Directory.CreateTempSubdirectory("flowsolver-browser").FullName;
    private IPlaywright? playwright;
    private IBrowser? browser;

    /// <summary>Folder to keep pictures in, so that a person can look at them; null keeps none.</summary>
    public static string? Kept { get; } = Environment.GetEnvironmentVariable("FLOWSOLVER_FIGURES");

    /// <summary>Why there is no browser; null where there is one.</summary>
    public static string? Missing { get; } = File.Exists(Executable) ? null : $"There is no browser at {Executable}; FLOWSOLVER_BROWSER may name another place.";

    public string Folder(string run) => Path.Combine(directory, run);

    public async Task InitializeAsync()
    {
        var line = SampleRuns.Line();
        var plane = SampleRuns.Plane();
        foreach (var (name, result, maps) in ((string, Studies.ComparisonResult, TransportPicture[]?)[])[("line", line, null), ("plane", plane, [SampleRuns.Map(plane, 0, 3)])])
        {
            Directory.CreateDirectory(Folder(name));
            RunWriter.WriteAll(result, SampleRuns.Labels, SampleRuns.Provenance, Folder(name), maps, formats: Reporting.Figures.FigureFormats.Svg);
        }

        var finer = Folder("line-finer");
        Directory.CreateDirectory(finer);
        RunWriter.WriteAll(SampleRuns.Line(step: 0.025), SampleRuns.Labels, SampleRuns.Provenance, finer, formats: Reporting.Figures.FigureFormats.Svg);
        Directory.CreateDirectory(Folder("gathered"));
        Reporting.Page.PageWriter.Write(Reporting.Page.GatherPage.Model([Folder("line"), finer]), Folder("gathered"));
        if (Missing is not null)
            return;
        playwright = await Playwright.CreateAsync();
        browser = await playwright.Chromium.LaunchAsync(new BrowserTypeLaunchOptions
        {
            ExecutablePath = Executable,
            Args =
            [
                "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking", "--disable-component-update", "--disable-sync",
            ],
        });
    }

    public async Task DisposeAsync()
    {
        if (browser is not null)
            await browser.CloseAsync();
        playwright?.Dispose();
        Directory.Delete(directory, recursive: true);
    }

    /// <summary>Opens a run's page and waits until its script has run.</summary>
    public async Task<OpenPage> Open(string run, int width = 1200, int height = 1000, ColorScheme scheme = ColorScheme.Light)
    {
        Skip.If(Missing is not null, Missing ?? "");
        var context = await browser!.NewContextAsync(new BrowserNewContextOptions
        {
            ViewportSize = new ViewportSize { Width = width, Height = height },
            ColorScheme = scheme,
        });
        var page = await context.NewPageAsync();
        var open = new OpenPage(context, page);
        page.Console += (_, message) =>
        {
            if (message.Type is "error" or "warning")
                open.Complaints.Add(message.Text);
        };
        page.PageError += (_, error) => open.Complaints.Add(error);
        page.Request += (_, request) => open.Requests.Add(request.Url);
        await page.GotoAsync("file://" + Path.Combine(Folder(run), "report.html"));
        await page.WaitForSelectorAsync("html[data-ready=true]", new PageWaitForSelectorOptions { State = WaitForSelectorState.Attached });
        return open;
    }

    /// <summary>A written table: cells by column name, as text.</summary>
    public IReadOnlyList<Dictionary<string, string>> Csv(string run, string name)
    {
        var lines = File.ReadAllLines(Path.Combine(Folder(run), name));
        var columns = lines[0].Split(',');
        return [.. lines.Skip(1).Select(line => line.Split(',').Select((cell, i) => (columns[i], cell)).ToDictionary(pair => pair.Item1, pair => pair.cell))];
    }
}

/// <summary>A page with what it complained about and asked for.</summary>
public sealed class OpenPage(IBrowserContext context, IPage page) : IAsyncDisposable
{
    public IPage Page { get; } = page;

    public List<string> Complaints { get; } = [];

    public List<string> Requests { get; } = [];

    public async Task Picture(string name, string? selector = null)
    {
        if (Browser.Kept is null)
            return;
        Directory.CreateDirectory(Browser.Kept);
        var path = Path.Combine(Browser.Kept, name + ".png");
        if (selector is null)
            await Page.ScreenshotAsync(new PageScreenshotOptions { Path = path });
        else
            await Page.Locator(selector).ScreenshotAsync(new LocatorScreenshotOptions { Path = path });
    }

    public async ValueTask DisposeAsync() => await context.CloseAsync();
}
