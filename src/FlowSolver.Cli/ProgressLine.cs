using System.Diagnostics;
using System.Globalization;
using FlowSolver.Problems;
using FlowSolver.Studies;

namespace FlowSolver.Cli;

/// <summary>
/// Progress on standard error: a bar that redraws itself on a terminal, a plain line every tenth of the work when piped, nothing when quiet.
/// </summary>
internal sealed class ProgressLine : IDisposable
{
    private const int BarWidth = 28;
    private readonly TextWriter writer;
    private readonly bool quiet;
    private readonly bool terminal;
    private readonly bool colour;
    private readonly Stopwatch clock = Stopwatch.StartNew();
    private long lastDrawn = long.MinValue;
    private int lastTenth = -1;
    private bool open;

    /// <summary>Creates a progress display.</summary>
    public ProgressLine(bool quiet) : this(
        Console.Error, quiet, !Console.IsErrorRedirected && Environment.GetEnvironmentVariable("TERM") != "dumb",
        string.IsNullOrEmpty(Environment.GetEnvironmentVariable("NO_COLOR")))
    {
    }

    /// <summary>Creates a progress display on a given writer.</summary>
    internal ProgressLine(TextWriter writer, bool quiet, bool terminal, bool colour)
    {
        this.writer = writer;
        this.quiet = quiet;
        this.terminal = terminal;
        this.colour = colour && terminal;
    }

    /// <summary>Shows that <paramref name="done"/> of <paramref name="all"/> is finished.</summary>
    public void Show(double done, double all, string doing)
    {
        if (quiet || all <= 0)
            return;
        var share = Math.Clamp(done / all, 0, 1);
        if (!terminal)
        {
            var tenth = (int)(share * 10);
            if (tenth <= lastTenth)
                return;
            lastTenth = tenth;
            writer.WriteLine(string.Create(CultureInfo.InvariantCulture, $"{100 * share,3:f0} %  {clock.Elapsed.TotalSeconds:f1} s  {doing}"));
            return;
        }

        if (share < 1 && clock.ElapsedMilliseconds - lastDrawn < 80)
            return;
        lastDrawn = clock.ElapsedMilliseconds;
        open = true;
        var filled = (int)Math.Round(share * BarWidth);
        var bar = new string('=', filled) + new string('.', BarWidth - filled);
        var left = share is > 0.02 and < 1 ? string.Create(CultureInfo.InvariantCulture, $"  about {clock.Elapsed.TotalSeconds * (1 - share) / share:f0} s left") : "";
        var (on, off) = colour ? ("\u001b[36m", "\u001b[0m") : ("", "");
        writer.Write(string.Create(CultureInfo.InvariantCulture, $"\r\u001b[K{on}{bar}{off} {100 * share,3:f0} %  {doing}{left}"));
        writer.Flush();
    }

    /// <summary>Shows the progress of a comparison.</summary>
    public IProgress<ComparisonProgress> For(TimePlan plan) => new ComparisonReporter(this, plan);

    private sealed class ComparisonReporter(ProgressLine line, TimePlan plan) : IProgress<ComparisonProgress>
    {
        public void Report(ComparisonProgress value)
        {
            var time = plan.ReportTimes[Math.Min(value.Report, plan.ReportTimes.Count - 1)];
            line.Show(value.Report, value.Reports, string.Create(CultureInfo.InvariantCulture, $"t = {time:g4}  {value.Doing}"));
        }
    }

    /// <summary>Removes the bar, so that what follows starts on a clean line.</summary>
    public void Dispose()
    {
        if (open)
        {
            writer.Write("\r\u001b[K");
            writer.Flush();
        }

        open = false;
    }
}
