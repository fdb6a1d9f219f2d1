using System.Globalization;
using System.Text.Json;
using FlowSolver.Reporting;
using Microsoft.Playwright;

namespace FlowSolver.BrowserTests;

/// <summary>
/// The page as a reader uses it. Mutations tried, each seen to fail: the slider no longer tells the readouts; numbers rounded to 3 digits; an image
/// from another address in the frame; no rules for print; a paler colour for lesser text.
/// </summary>
public sealed class RunPageTests(Browser browser) : IClassFixture<Browser>
{
    public static TheoryData<string> Runs => new("line", "plane");

    [SkippableTheory]
    [MemberData(nameof(Runs))]
    public async Task Page_Opened_ComplainsOfNothingAndAsksForNothing(string run)
    {
        await using var open = await browser.Open(run);
        await open.Page.Locator("#play").ClickAsync();
        await open.Page.WaitForTimeoutAsync(600);
        await open.Page.Locator("#theme").ClickAsync();
        foreach (var details in await open.Page.Locator("details").AllAsync())
            await details.Locator("summary").ClickAsync();
        Assert.Empty(open.Complaints);
        Assert.All(open.Requests, request => Assert.True(request.StartsWith("file://", StringComparison.Ordinal) || request.StartsWith("data:", StringComparison.Ordinal), request));
        Assert.Single(open.Requests, request => request.StartsWith("file://", StringComparison.Ordinal));
        await open.Picture($"{run}-dark-full", "main");
    }

    [SkippableTheory]
    [MemberData(nameof(Runs))]
    public async Task Slider_Moved_TakesDensityReadoutsAndBudgetAlong(string run)
    {
        await using var open = await browser.Open(run);
        var page = open.Page;
        var picture = page.Locator(run == "line" ? "#density canvas" : "canvas[data-map=jko]").First;
        var times = browser.Csv(run, "series.csv").Select(row => row["time"]).Distinct().ToList();
        await page.Locator("#time").FocusAsync();
        await page.Keyboard.PressAsync("Home");
        string? before = null;
        for (var i = 0; i < times.Count; i++)
        {
            var time = double.Parse(times[i], CultureInfo.InvariantCulture);
            Assert.Equal("t = " + Shown(time, 4) + " s", await page.Locator("#time-shown").InnerTextAsync());
            Assert.Equal("t = " + Shown(time, 4) + " s", await page.Locator("#time").GetAttributeAsync("aria-valuetext"));
            foreach (var row in browser.Csv(run, "series.csv").Where(row => row["time"] == times[i]))
            {
                foreach (var column in (string[])["mean_x", "var_x", "free_energy", "relative_entropy", "w2_exact", "tv_exact"])
                    await IsCell(page.Locator($"#readouts-now tr[data-method='{row["method"]}'] td[data-column='{column}']"), row[column]);
            }

            foreach (var row in browser.Csv(run, "budget.csv").Where(row => row["time"] == times[i]))
            {
                var table = page.Locator($"#budget-now table[data-sampler='{row["sampler"]}']");
                Assert.StartsWith(row["sampler"] + ": " + row["verdict"], await table.Locator("caption").InnerTextAsync(), StringComparison.Ordinal);
                foreach (var column in (string[])["total_w2", "step_bias_w2", "noise_w2_mean", "noise_w2_p95", "grid_w2"])
                    await IsCell(table.Locator($"td[data-column='{column}']"), row[column]);
            }

            var now = await picture.EvaluateAsync<string>("canvas => canvas.toDataURL()");
            Assert.NotEqual(before, now);
            before = now;
            await page.Keyboard.PressAsync("ArrowRight");
        }

        static async Task IsCell(ILocator cell, string written)
        {
            var text = await cell.InnerTextAsync();
            Assert.Equal(written.Length == 0 ? "" : Shown(double.Parse(written, CultureInfo.InvariantCulture), 4), text);
            if (written.Length > 0)
                Assert.Equal(double.Parse(written, CultureInfo.InvariantCulture), double.Parse((await cell.Locator("data").GetAttributeAsync("value"))!, CultureInfo.InvariantCulture));
        }
    }

    [SkippableTheory]
    [MemberData(nameof(Runs))]
    public async Task EveryNumber_OnThePage_StandsInATable(string run)
    {
        await using var open = await browser.Open(run);
        var written = new HashSet<double>();
        foreach (var name in (string[])["series.csv", "steps.csv", "budget.csv"])
        {
            foreach (var cell in browser.Csv(run, name).SelectMany(row => row.Values))
            {
                if (double.TryParse(cell, NumberStyles.Float, CultureInfo.InvariantCulture, out var number))
                    written.Add(number);
            }
        }

        using var record = JsonDocument.Parse(await File.ReadAllTextAsync(Path.Combine(browser.Folder(run), "run.json")));
        foreach (var error in record.RootElement.GetProperty("grid_w2").EnumerateArray().Where(error => error.ValueKind == JsonValueKind.Number))
            written.Add(error.GetDouble());
        var shown = await open.Page.EvaluateAsync<string[][]>("() => [...document.querySelectorAll('data')].map(d => [d.value, d.textContent])");
        Assert.True(shown.Length > 500, $"There were {shown.Length} numbers.");
        foreach (var pair in shown)
        {
            var value = double.Parse(pair[0], CultureInfo.InvariantCulture);
            Assert.Contains(value, written);
            Assert.Contains(pair[1], (string[])[Shown(value, 4), Shown(value, 6)]);
        }
    }

    [SkippableTheory]
    [MemberData(nameof(Runs))]
    public async Task Switch_TurnedOff_HidesTheMethodEverywhere(string run)
    {
        await using var open = await browser.Open(run);
        var page = open.Page;
        var jko = page.Locator("input[data-method=jko]");
        // Once in the explorer and once in each chart over time.
        Assert.Equal(4, await jko.CountAsync());
        var distance = page.Locator("[data-chart] canvas").First;
        var before = await distance.EvaluateAsync<string>("canvas => canvas.toDataURL()");
        Assert.Equal(1, await page.Locator("#readouts-now tr[data-method=jko]").CountAsync());
        await page.Locator(".explorer input[data-method=jko]").First.PressAsync("Space");
        Assert.Equal(0, await page.Locator("#readouts-now tr[data-method=jko]").CountAsync());
        Assert.NotEqual(before, await distance.EvaluateAsync<string>("canvas => canvas.toDataURL()"));
        for (var i = 0; i < await jko.CountAsync(); i++)
            Assert.False(await jko.Nth(i).IsCheckedAsync());
        if (run == "plane")
            Assert.True(await page.Locator("figure:has(canvas[data-map=jko])").IsHiddenAsync());
        await page.Locator(".explorer input[data-method=ula]").First.PressAsync("Space");
        Assert.Equal(0, await page.Locator("#budget-now table[data-sampler=ula]").CountAsync());
        await page.Locator("[data-chart] input[data-method=jko]").First.PressAsync("Space");
        Assert.Equal(1, await page.Locator("#readouts-now tr[data-method=jko]").CountAsync());
        Assert.True(await jko.First.IsCheckedAsync());
    }

    [SkippableFact]
    public async Task Keyboard_Alone_ReadsValuesAndSetsTheTime()
    {
        await using var open = await browser.Open("line");
        var page = open.Page;
        await page.Keyboard.PressAsync("Tab");
        Assert.Equal("To the findings", await page.EvaluateAsync<string>("() => document.activeElement.textContent"));
        await page.Keyboard.PressAsync("Tab");
        Assert.Equal("theme", await page.EvaluateAsync<string>("() => document.activeElement.id"));
        await page.Locator("#density").FocusAsync();
        await page.Keyboard.PressAsync("End");
        await page.Keyboard.PressAsync("Home");
        for (var i = 0; i < 9; i++)
            await page.Keyboard.PressAsync("Shift+ArrowRight");
        var readout = await page.Locator("#density + .readout").InnerTextAsync();
        // The value read out is the density's value in that cell.
        var x = double.Parse(readout.Split(['=', 'µ'])[1].Replace('−', '-'), CultureInfo.InvariantCulture);
        var time = (await page.Locator("#time-shown").InnerTextAsync()).Split(' ')[2];
        var row = browser.Csv("line", "density.csv").Single(cells => Shown(Number(cells["time"]), 4) == time && Shown(Number(cells["x"]), 4) == Shown(x, 4));
        foreach (var method in (string[])["exact", "jko", "split-proximal", "split-gradient", "equilibrium"])
            Assert.Contains($"{method} {Shown(double.Parse(Number(row[method]).ToString("G6", CultureInfo.InvariantCulture), CultureInfo.InvariantCulture), 4)}", readout, StringComparison.Ordinal);
        Assert.Equal("polite", await page.Locator("#density + .readout").GetAttributeAsync("aria-live"));
        await open.Picture("line-readout", "section:has(#density)");
        await page.Keyboard.PressAsync("Escape");
        Assert.StartsWith("Point at the chart", await page.Locator("#density + .readout").InnerTextAsync(), StringComparison.Ordinal);
        await page.Locator("[data-chart] .plot").First.FocusAsync();
        await page.Keyboard.PressAsync("End");
        Assert.Contains("time = 3", await page.Locator("[data-chart] .readout").First.InnerTextAsync(), StringComparison.Ordinal);
        await page.Keyboard.PressAsync("Enter");
        Assert.Equal("t = 3 s", await page.Locator("#time-shown").InnerTextAsync());

        static double Number(string text) => double.Parse(text, CultureInfo.InvariantCulture);
    }

    [SkippableFact]
    public async Task GatheredPage_SwitchesARunInAllItsChartsAndComplainsOfNothing()
    {
        await using var open = await browser.Open("gathered");
        var page = open.Page;
        var charts = page.Locator("[data-chart] canvas");
        var before = new List<string>();
        for (var i = 0; i < await charts.CountAsync(); i++)
            before.Add(await charts.Nth(i).EvaluateAsync<string>("canvas => canvas.toDataURL()"));
        Assert.True(before.Count >= 5);
        await page.Locator("input[data-method=line]").First.PressAsync("Space");
        for (var i = 0; i < before.Count; i++)
            Assert.NotEqual(before[i], await charts.Nth(i).EvaluateAsync<string>("canvas => canvas.toDataURL()"));
        Assert.Empty(open.Complaints);
        await page.Locator("input[data-method=line]").First.PressAsync("Space");
        await open.Picture("gathered", "main");
    }

    [SkippableFact]
    public async Task Map_UnderThePointerAndTheKeys_GivesValuesOfEveryMethod()
    {
        await using var open = await browser.Open("plane");
        var page = open.Page;
        var map = page.Locator("canvas[data-map=exact]");
        await map.HoverAsync();
        var readout = await page.Locator("#map-readout").InnerTextAsync();
        Assert.Matches("^x = .+ µm, y = .+ µm · V .+ · exact .+ · jko .+ · split-proximal .+ · split-gradient .+", readout);
        await page.Mouse.MoveAsync(0, 0);
        Assert.StartsWith("Point at a map", await page.Locator("#map-readout").InnerTextAsync(), StringComparison.Ordinal);
        await map.FocusAsync();
        await page.Keyboard.PressAsync("ArrowRight");
        Assert.StartsWith("x = 0.0625 µm, y = 0 µm", await page.Locator("#map-readout").InnerTextAsync(), StringComparison.Ordinal);
        var before = await map.EvaluateAsync<string>("canvas => canvas.toDataURL()");
        await page.Locator("#map").SelectOptionAsync("0");
        var arrows = await map.EvaluateAsync<string>("canvas => canvas.toDataURL()");
        Assert.NotEqual(before, arrows);
        await page.Locator("#walkers").SelectOptionAsync("");
        Assert.NotEqual(arrows, await map.EvaluateAsync<string>("canvas => canvas.toDataURL()"));
        await open.Picture("plane-maps", ".explorer");
        await page.Locator("#levels").PressAsync("Space");
        await open.Picture("plane-without-levels", ".explorer");
    }

    [SkippableTheory]
    [InlineData("line", ColorScheme.Light)]
    [InlineData("line", ColorScheme.Dark)]
    [InlineData("plane", ColorScheme.Dark)]
    public async Task Text_InBothThemes_HasTheContrastOfWcagAA(string run, ColorScheme scheme)
    {
        await using var open = await browser.Open(run, scheme: scheme);
        Assert.Equal(scheme == ColorScheme.Dark ? "dark" : "light", await open.Page.EvaluateAsync<string>("() => document.documentElement.dataset.theme"));
        await open.Picture($"{run}-{(scheme == ColorScheme.Dark ? "dark" : "light")}-top");
        foreach (var _ in (int[])[0, 1])
        {
            // WCAG 2.2, success criterion 1.4.3: 4.5:1 for text, on the nearest background that is not transparent.
            var poor = await open.Page.EvaluateAsync<string[]>(
                """
                () => {
                  const parse = text => { const p = text.match(/[\d.]+/g).map(Number); return text.includes('srgb') ? [p[0] * 255, p[1] * 255, p[2] * 255, p[3] ?? 1] : [p[0], p[1], p[2], p[3] ?? 1]; };
                  const light = c => [0, 1, 2].map(i => { const v = c[i] / 255; return v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; }).reduce((s, v, i) => s + v * [0.2126, 0.7152, 0.0722][i], 0);
                  const poor = [];
                  for (const e of document.querySelectorAll('main *, .bar *')) {
                    if (![...e.childNodes].some(n => n.nodeType === 3 && n.textContent.trim()) || e.closest('svg, script, option') || !e.checkVisibility()) continue;
                    let b = e;
                    while (b && parse(getComputedStyle(b).backgroundColor)[3] < 1) b = b.parentElement;
                    const [f, g] = [light(parse(getComputedStyle(e).color)), light(parse(getComputedStyle(b ?? document.body).backgroundColor))];
                    const contrast = (Math.max(f, g) + 0.05) / (Math.min(f, g) + 0.05);
                    if (contrast < 4.5) poor.push(e.tagName + ' ' + e.className + ' ' + contrast.toFixed(2) + ' ' + e.textContent.slice(0, 40));
                  }
                  return poor;
                }
                """);
            Assert.Empty(poor);
            await open.Page.Locator("#theme").ClickAsync();
        }
    }

    [SkippableTheory]
    [MemberData(nameof(Runs))]
    public async Task Controls_AllHaveNamesAndHeadingsFollowOneAnother(string run)
    {
        await using var open = await browser.Open(run);
        var nameless = await open.Page.EvaluateAsync<string[]>(
            """
            () => [...document.querySelectorAll('input, button, select, [role=img], [role=region], canvas[tabindex], section, fieldset')]
              .filter(e => !(e.labels?.length || e.getAttribute('aria-label') || document.getElementById(e.getAttribute('aria-labelledby'))?.textContent
                || e.querySelector('legend')?.textContent || (e.tagName === 'BUTTON' && e.textContent.trim())))
              .map(e => e.outerHTML.slice(0, 120))
            """);
        Assert.Empty(nameless);
        var levels = await open.Page.EvaluateAsync<int[]>("() => [...document.querySelectorAll('h1,h2,h3')].map(h => Number(h.tagName[1]))");
        Assert.Equal(1, levels[0]);
        Assert.Single(levels, 1);
        for (var i = 1; i < levels.Length; i++)
            Assert.True(levels[i] <= levels[i - 1] + 1);
        var duplicates = await open.Page.EvaluateAsync<string[]>("() => { const ids = [...document.querySelectorAll('[id]')].map(e => e.id); return ids.filter((id, i) => ids.indexOf(id) !== i); }");
        Assert.Empty(duplicates);
    }

    [SkippableTheory]
    [InlineData("line", 360)]
    [InlineData("line", 800)]
    [InlineData("plane", 360)]
    [InlineData("plane", 1200)]
    public async Task Page_AtAnyWidth_DoesNotScrollSideways(string run, int width)
    {
        await using var open = await browser.Open(run, width);
        await open.Picture($"{run}-{width}", "main");
        Assert.Empty(await open.Page.EvaluateAsync<string[]>(Overhanging));
        // And it follows a change of width.
        await open.Page.SetViewportSizeAsync(500, 900);
        await open.Page.WaitForTimeoutAsync(200);
        Assert.Empty(await open.Page.EvaluateAsync<string[]>(Overhanging));
    }

    // What makes the page scroll sideways: everything that reaches past the right edge and does not scroll within itself.
    private const string Overhanging =
        """
        () => document.documentElement.scrollWidth <= document.documentElement.clientWidth ? [] : ['page ' + document.documentElement.scrollWidth,
          ...[...document.querySelectorAll('body *')].filter(e => e.getBoundingClientRect().right > document.documentElement.clientWidth && !e.closest('.scroll, pre'))
            .map(e => e.tagName + '.' + e.className + ' ' + Math.round(e.getBoundingClientRect().right) + ' ' + e.textContent.slice(0, 30))]
        """;

    [SkippableTheory]
    [MemberData(nameof(Runs))]
    public async Task Print_FromADarkScreen_IsLightFitsAndLeavesTheControlsOut(string run)
    {
        await using var open = await browser.Open(run, scheme: ColorScheme.Dark);
        var page = open.Page;
        var pdf = await page.PdfAsync(new PagePdfOptions { Format = "A4", PrintBackground = true });
        Assert.StartsWith("%PDF", System.Text.Encoding.ASCII.GetString(pdf, 0, 8), StringComparison.Ordinal);
        if (Browser.Kept is not null)
            await File.WriteAllBytesAsync(Path.Combine(Directory.CreateDirectory(Browser.Kept).FullName, run + "-print.pdf"), pdf);
        await page.EmulateMediaAsync(new PageEmulateMediaOptions { Media = Media.Print, ColorScheme = ColorScheme.Dark });
        await page.EvaluateAsync("() => dispatchEvent(new Event('beforeprint'))");
        Assert.Equal("light", await page.EvaluateAsync<string>("() => document.documentElement.dataset.theme"));
        Assert.False(await page.Locator("#play").IsVisibleAsync());
        Assert.False(await page.Locator("#theme").IsVisibleAsync());
        Assert.True(await page.Locator("#time-shown").IsVisibleAsync());
        var widest = await page.EvaluateAsync<double>("() => Math.max(...[...document.querySelectorAll('main canvas, main .plot')].map(e => e.getBoundingClientRect().width))");
        Assert.InRange(widest, 100, 690);
        await page.EvaluateAsync("() => dispatchEvent(new Event('afterprint'))");
        Assert.Equal("dark", await page.EvaluateAsync<string>("() => document.documentElement.dataset.theme"));
    }

    private static string Shown(double value, int digits) => Numbers.Short(value, digits).Replace('-', '−');
}
