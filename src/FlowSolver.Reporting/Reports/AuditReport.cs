using System.Globalization;
using FlowSolver.Reporting.Figures;
using FlowSolver.Reporting.Page;
using FlowSolver.Reporting.Tables;
using FlowSolver.Studies;

namespace FlowSolver.Reporting.Reports;

/// <summary>Table, figures and page of an audit.</summary>
public static class AuditReport
{
    /// <summary>Rows of <c>audit.csv</c>.</summary>
    public static Table Rows(IReadOnlyList<AuditRow> rows, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(rows);
        ArgumentNullException.ThrowIfNull(labels);
        return new Table("audit",
            [
                new TableColumn("samples"), new TableColumn("time", "time", labels.Time), new TableColumn("count"), new TableColumn("w2", "W2", labels.Length),
                new TableColumn("noise_w2_mean", "noise, mean", labels.Length), new TableColumn("noise_w2_p95", "noise, 95 %", labels.Length), new TableColumn("p_value", "p"),
                new TableColumn("verdict"), new TableColumn("effective_count", "worth independent"), new TableColumn("grid_w2", "grid", labels.Length), new TableColumn("cause"),
            ],
            [.. rows.Select(IReadOnlyList<Cell> (row) => [
                row.Samples, row.Time, row.Count, row.Distance, row.NoiseMean, row.Noise95, row.PValue, row.Verdict, row.EffectiveCount, row.GridError, row.Cause.Length == 0 ? null : row.Cause])],
            "time is empty for equilibrium");
    }

    /// <summary>Rows of <c>alternatives.csv</c>: every law that was tried.</summary>
    public static Table Alternatives(IReadOnlyList<AuditRow> rows, CaseLabels labels)
    {
        ArgumentNullException.ThrowIfNull(rows);
        ArgumentNullException.ThrowIfNull(labels);
        return new Table("alternatives",
            [new TableColumn("samples"), new TableColumn("alternative"), new TableColumn("value"), new TableColumn("w2", "W2 to it", labels.Length), new TableColumn("explains", "within noise")],
            [.. rows.SelectMany(row => row.Alternatives.Select(IReadOnlyList<Cell> (alternative) => [
                row.Samples, alternative.Name, alternative.Value, (double?)(double.IsFinite(alternative.Distance) ? alternative.Distance : null), alternative.Explains ? "yes" : "no"]))]);
    }

    /// <summary>The whole report.</summary>
    public static StudyReport Of(IReadOnlyList<AuditRow> rows, CaseLabels labels, RunProvenance provenance, string title, FigureStyle? style = null)
    {
        ArgumentNullException.ThrowIfNull(rows);
        ArgumentNullException.ThrowIfNull(labels);
        ArgumentNullException.ThrowIfNull(provenance);
        var look = style ?? FigureStyle.Default;
        var table = Rows(rows, labels);
        var sections = new List<PageSection> { new TableSection("Set by set", "The rows of audit.csv, without the causes, which stand above.", WithoutCause(table)) };
        var figures = new List<Figure>();
        foreach (var (row, index) in rows.Select((row, index) => (row, index)))
        {
            var suffix = rows.Count == 1 ? "" : "-" + (index + 1).ToString(CultureInfo.InvariantCulture);
            foreach (var curves in row.Curves)
                figures.Add(Shape(row, curves, labels, look, suffix));
            if (row.NoiseDistances.Count > 0 && row.Distance is not null)
                figures.Add(Noise(row, labels, look, suffix));
        }

        sections.AddRange(figures.SelectMany(figure => figure.Panels.OfType<LinePanel>().Select((panel, i) =>
            (PageSection)new ChartSection(panel.Title.Length > 0 && figure.Panels.Count > 1 ? $"{figure.Title}: {panel.Title}" : figure.Title, i == 0 ? figure.Caption : "", panel))));
        var alternatives = Alternatives(rows, labels);
        if (alternatives.Rows.Count > 0)
            sections.Insert(1, new TableSection("What else was tried", "Distance of the samples from the laws that common mistakes produce. Within noise: the samples cannot be told from draws of that law.", alternatives));
        sections.AddRange(ClosingSections.Of(provenance, rows.SelectMany(row => row.Notes.Select(note => ($"{row.Samples}: {note}", false))),
            "A p-value says how often right samples lie this far off by chance. A set that agrees may still differ by less than its noise: the 95 % point of the noise is what this many samples can see."));
        var differs = rows.Count(row => row.Verdict == "differs");
        var worst = rows.MaxBy(row => row.Distance / row.Noise95 ?? 0)!;
        var verdict = new Verdict(
            differs > 0 ? VerdictTone.Attention : rows.Any(row => row.Verdict == "not measured") ? VerdictTone.Failed : VerdictTone.Sound,
            differs == 0 ? rows.Any(row => row.Verdict == "not measured") ? "Not every set could be measured." : rows.Count == 1 ? "The samples agree with the case's law." : $"All {rows.Count} sets agree with the case's law."
                : rows.Count == 1 ? $"The samples differ from the case's law. {worst.Cause}" : $"{differs} of {rows.Count} sets differ from the case's law. {worst.Cause}",
            [.. rows.Select(row => Sentence(row, labels))]);
        var numbers = new List<KeyNumber>();
        if (worst.Distance is { } distance)
            numbers.Add(new KeyNumber("W2 to the law", distance, labels.Length, worst.Samples));
        if (worst.Noise95 is { } noise)
            numbers.Add(new KeyNumber("noise, 95 %", noise, labels.Length, $"{worst.Count} samples"));
        if (worst.PValue is { } p)
            numbers.Add(new KeyNumber("p-value", p));
        if (worst.EffectiveCount is { } effective)
            numbers.Add(new KeyNumber("worth independent samples", Math.Round(effective)));
        var page = new PageModel("audit", title, $"Do the samples {string.Join(", ", rows.Select(row => row.Samples).Take(4))} follow the law of the case?", verdict, numbers, sections);
        return new StudyReport(page, alternatives.Rows.Count > 0 ? [table, alternatives] : [table], [], figures, provenance, rows.Any(row => row.Verdict == "not measured"));
    }

    private static Table WithoutCause(Table table)
        => new(table.Name, [.. table.Columns.SkipLast(1)], [.. table.Rows.Select(IReadOnlyList<Cell> (row) => [.. row.SkipLast(1)])], table.Caption);

    private static string Sentence(AuditRow row, CaseLabels labels)
    {
        var unit = labels.Length is null ? "" : " " + labels.Length;
        var where = row.Time is { } time ? $"t = {Numbers.Short(time)}{(labels.Time is null ? "" : " " + labels.Time)}" : "equilibrium";
        if (row.Distance is not { } distance || row.PValue is not { } p)
            return $"{row.Samples}, against {where}: the distance could not be measured.";
        return $"{row.Samples}, against {where}: W2 is {Numbers.Short(distance, 3)}{unit}; right samples of this size lie {Numbers.Short(row.NoiseMean, 3)}{unit} off on average and {Numbers.Short(row.Noise95, 3)}{unit} at most 95 % of the time; p = {Numbers.Short(p, 3)}, {row.Verdict}."
            + (row.Cause.Length > 0 ? " " + row.Cause : "");
    }

    private static Figure Shape(AuditRow row, AuditCurves curves, CaseLabels labels, FigureStyle style, string suffix)
    {
        var x = CaseLabels.WithUnit(curves.Axis, labels.Length);
        var density = labels.Length is null ? "density" : $"density (1/{labels.Length})";
        var law = style.Exact;
        var samples = style.Samplers[0] with { Marker = CurveMarker.None };
        var band = curves.Band;
        var ends = new[] { curves.Positions[0], curves.Positions[^1] };
        return new Figure("shape-" + curves.Axis + suffix, $"{row.Samples} along {curves.Axis}",
            "Histogram against the law; quantiles of the samples minus those of the law; share of samples below each position minus that of the law, with the band that right samples leave only 5 % of the time.",
            [
                new LinePanel("histogram", x, density)
                {
                    Curves =
                    [
                        new Curve("law", curves.BinEdges, [.. curves.LawDensity, curves.LawDensity[^1]], law, IsStairs: true),
                        new Curve("samples", curves.BinEdges, [.. curves.SampleDensity, curves.SampleDensity[^1]], samples, IsStairs: true),
                    ],
                },
                new LinePanel("quantiles", "quantile of the law" + (labels.Length is null ? "" : $" ({labels.Length})"), CaseLabels.WithUnit("samples − law", labels.Length))
                {
                    Curves =
                    [
                        new Curve(null, curves.LawQuantiles, [.. curves.LawQuantiles.Zip(curves.SampleQuantiles, (of, by) => by - of)], samples),
                        new Curve(null, [curves.LawQuantiles[0], curves.LawQuantiles[^1]], [0, 0], style.Equilibrium),
                    ],
                },
                new LinePanel("cumulative share", x, "samples − law")
                {
                    Bands = [new Band("95 % of right samples", ends, [-band, -band], [band, band])],
                    Curves = [new Curve(null, curves.Positions, curves.CumulativeDifference, samples)],
                },
            ]);
    }

    private static Figure Noise(AuditRow row, CaseLabels labels, FigureStyle style, string suffix)
    {
        // The simulated distances as a staircase from 0 to 1, and the samples' own as an upright line.
        var distances = row.NoiseDistances;
        var shares = Enumerable.Range(0, distances.Count).Select(i => (i + 1.0) / distances.Count).ToArray();
        return new Figure("noise" + suffix, $"{row.Samples}: distance against the noise",
            "The curve is the share of simulated right sample sets that lie within a distance of the law; the upright line is where these samples lie.",
            [
                new LinePanel("", CaseLabels.WithUnit("W2 to the law", labels.Length), "share within")
                {
                    Curves =
                    [
                        new Curve("right samples", [.. distances], shares, style.Exact, IsStairs: true),
                        new Curve("these samples", [row.Distance!.Value, row.Distance.Value], [0, 1], style.Samplers[0] with { Marker = CurveMarker.None }),
                    ],
                    YFrom = 0,
                    YTo = 1,
                },
            ]);
    }
}
