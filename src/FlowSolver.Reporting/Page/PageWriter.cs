using System.Globalization;
using System.Net;
using System.Reflection;
using System.Text;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Tables;

namespace FlowSolver.Reporting.Page;

/// <summary>
/// Turns a page's model into one self-contained HTML file: style, script, charting library and data stand inside it, and its content policy
/// forbids every request. Words and tables are in the HTML itself; charts are drawn by the script from one block of JSON.
/// </summary>
public static class PageWriter
{
    private const string Library = "uPlot-1.6.32";

    /// <summary>Writes <c>report.html</c>, or a file of another name, and returns its path.</summary>
    public static string Write(PageModel page, string directory, string fileName = "report.html")
    {
        ArgumentNullException.ThrowIfNull(directory);
        var path = Path.Combine(directory, fileName);
        File.WriteAllText(path, Html(page));
        return path;
    }

    /// <summary>The page as text.</summary>
    public static string Html(PageModel page)
    {
        ArgumentNullException.ThrowIfNull(page);
        var body = new StringBuilder();
        var charts = new List<(string Id, LinePanel Panel)>();
        var explorers = new List<(string Id, RunExplorer Data)>();
        Head(body, page);
        for (var i = 0; i < page.Sections.Count; i++)
            Section(body, page.Sections[i], "s" + i.ToString(CultureInfo.InvariantCulture), charts, explorers);
        var data = PageJson.Text(json =>
        {
            json.WriteStartObject();
            json.WriteStartObject("charts");
            foreach (var (id, panel) in charts)
            {
                json.WritePropertyName(id);
                PageJson.Chart(json, panel);
            }

            json.WriteEndObject();
            json.WriteStartObject("explorers");
            foreach (var (id, explorer) in explorers)
            {
                json.WritePropertyName(id);
                explorer.Write(json);
            }

            json.WriteEndObject();
            json.WriteEndObject();
        });
        // The licence of the embedded library asks for its notice to travel with it.
        var library = "/*\n" + Resource("vendor." + "uPlot-LICENSE.txt").TrimEnd() + "\n*/\n" + Resource("vendor." + Library + ".iife.min.js");
        return Resource("frame.html")
            .Replace("{{title}}", Text(page.Title), StringComparison.Ordinal)
            .Replace("{{style}}", Resource("vendor." + Library + ".min.css") + "\n" + Resource("page.css"), StringComparison.Ordinal)
            .Replace("{{body}}", body.ToString(), StringComparison.Ordinal)
            .Replace("{{data}}", data, StringComparison.Ordinal)
            .Replace("{{library}}", library, StringComparison.Ordinal)
            .Replace("{{script}}", Resource("page.js"), StringComparison.Ordinal)
            .ReplaceLineEndings("\n");
    }

    private static string Resource(string name)
    {
        var assembly = Assembly.GetExecutingAssembly();
        using var stream = assembly.GetManifestResourceStream("FlowSolver.Reporting.Page." + name)
            ?? throw new InvalidOperationException($"The page's part '{name}' was not found in {assembly.GetName().Name}; it must be built in.");
        using var reader = new StreamReader(stream, Encoding.UTF8);
        return reader.ReadToEnd();
    }

    private static string Text(string text) => WebUtility.HtmlEncode(text);

    /// <summary>A number for reading that carries its exact value.</summary>
    private static string Value(double number, int digits) => $"<data value=\"{Numbers.Exact(number)}\">{Numbers.Short(number, digits).Replace('-', '−')}</data>";

    private static void Head(StringBuilder body, PageModel page)
    {
        var (sign, word, tone) = page.Verdict.Tone switch
        {
            VerdictTone.Sound => ("✓", "agreement", "sound"),
            VerdictTone.Attention => ("!", "a difference", "attention"),
            _ => ("✕", "not to be trusted as it is", "failed"),
        };
        body.Append("<header class=\"top\"><p class=\"kind\">FlowSolver · ").Append(Text(page.Kind)).Append("</p><h1>").Append(Text(page.Title)).Append("</h1>");
        body.Append("<p class=\"asked\"><span class=\"tag\">Asked</span> ").Append(Text(page.Question)).Append("</p></header>\n");
        body.Append("<section class=\"verdict ").Append(tone).Append("\" aria-labelledby=\"verdict\"><p class=\"tag\"><span class=\"sign\" aria-hidden=\"true\">").Append(sign).Append("</span> Found: ").Append(Text(page.Verdict.Word ?? word)).Append("</p>");
        body.Append("<h2 id=\"verdict\">").Append(Text(page.Verdict.Headline)).Append("</h2>");
        if (page.Verdict.Reasons.Count > 0)
        {
            body.Append("<ul>");
            foreach (var reason in page.Verdict.Reasons)
                body.Append("<li>").Append(Text(reason)).Append("</li>");
            body.Append("</ul>");
        }

        body.Append("</section>\n");
        if (page.KeyNumbers.Count == 0)
            return;
        body.Append("<section aria-label=\"Key numbers\"><dl class=\"keys\">");
        foreach (var key in page.KeyNumbers)
        {
            body.Append("<div><dt>").Append(Text(key.Label)).Append("</dt><dd class=\"number\">").Append(Value(key.Value, 4));
            if (key.Unit is not null)
                body.Append(" <span class=\"unit\">").Append(Text(key.Unit)).Append("</span>");
            body.Append("</dd>");
            if (key.Note is not null)
                body.Append("<dd class=\"note\">").Append(Text(key.Note)).Append("</dd>");
            body.Append("</div>");
        }

        body.Append("</dl></section>\n");
    }

    private static void Section(StringBuilder body, PageSection section, string id, List<(string, LinePanel)> charts, List<(string, RunExplorer)> explorers)
    {
        body.Append("<section id=\"").Append(id).Append("\" aria-labelledby=\"").Append(id).Append("-h\">\n<h2 id=\"").Append(id).Append("-h\">").Append(Text(section.Title)).Append("</h2>\n");
        if (section.Lead.Length > 0)
            body.Append("<p class=\"lead\">").Append(Text(section.Lead)).Append("</p>\n");
        switch (section)
        {
            case TextSection text:
                foreach (var paragraph in text.Paragraphs)
                    body.Append("<p>").Append(Text(paragraph)).Append("</p>\n");
                break;
            case TableSection table:
                if (table.IsFolded)
                    body.Append("<details><summary>Show ").Append(table.Table.Rows.Count.ToString(CultureInfo.InvariantCulture)).Append(" rows</summary>");
                Table(body, table.Table, table.IsFolded ? 6 : 4, section.Title);
                if (table.IsFolded)
                    body.Append("</details>\n");
                break;
            case ChartSection chart:
                charts.Add((id, chart.Chart));
                body.Append("<div class=\"chart\" data-chart=\"").Append(id).Append("\"></div>\n");
                break;
            case PictureSection picture:
                using (var writer = new FigureWriter())
                {
                    var svg = writer.Svg(picture.Figure);
                    body.Append("<div class=\"picture\">").Append(svg[svg.IndexOf("<svg", StringComparison.Ordinal)..]).Append("</div>\n");
                }

                break;
            case RemarksSection remarks:
                if (remarks.Remarks.Count > 0)
                {
                    body.Append("<ul class=\"remarks\">");
                    foreach (var (text, isFailure) in remarks.Remarks)
                        body.Append(isFailure ? "<li class=\"failure\"><strong>Failure.</strong> " : "<li>").Append(Text(text)).Append("</li>");
                    body.Append("</ul>\n");
                }

                break;
            case FactsSection facts:
                body.Append("<dl class=\"facts\">");
                foreach (var (name, value) in facts.Facts)
                    body.Append("<div><dt>").Append(Text(name)).Append("</dt><dd>").Append(Text(value)).Append("</dd></div>");
                body.Append("</dl>\n");
                if (facts.Text is not null)
                    body.Append("<details><summary>The case as it was run</summary><pre tabindex=\"0\">").Append(Text(facts.Text)).Append("</pre></details>\n");
                break;
            case ExplorerSection explorer:
                explorers.Add((id, explorer.Data));
                body.Append("<div class=\"explorer\" data-explorer=\"").Append(id).Append("\"></div>\n");
                break;
        }

        body.Append("</section>\n");
    }

    private static void Table(StringBuilder body, Table table, int digits, string title)
    {
        var isText = Enumerable.Range(0, table.Columns.Count).Select(c => table.Rows.Any(row => row[c].Text is not null)).ToArray();
        body.Append("<div class=\"scroll\" tabindex=\"0\" role=\"region\" aria-label=\"Table: ").Append(Text(title)).Append("\"><table data-table=\"").Append(Text(table.Name)).Append("\"><thead><tr>");
        for (var c = 0; c < table.Columns.Count; c++)
        {
            var column = table.Columns[c];
            body.Append("<th scope=\"col\"").Append(isText[c] ? "" : " class=\"n\"").Append(" data-column=\"").Append(Text(column.Name)).Append("\">").Append(Text(column.Heading ?? column.Name));
            if (column.Unit is not null)
                body.Append(" <span class=\"unit\">").Append(Text(column.Unit)).Append("</span>");
            body.Append("</th>");
        }

        body.Append("</tr></thead><tbody>\n");
        foreach (var row in table.Rows)
        {
            body.Append("<tr>");
            for (var c = 0; c < row.Count; c++)
            {
                var cell = row[c];
                body.Append(cell.Text is not null || isText[c] ? "<td>" : "<td class=\"n\">");
                if (cell.Number is { } number)
                    body.Append(Value(number, digits));
                else if (cell.Text is { } text)
                    body.Append(Text(text));
                body.Append("</td>");
            }

            body.Append("</tr>\n");
        }

        body.Append("</tbody></table></div>\n");
    }
}
