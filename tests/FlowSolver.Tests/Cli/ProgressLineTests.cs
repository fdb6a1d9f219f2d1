using FlowSolver.Cli;

namespace FlowSolver.Tests.Cli;

public sealed class ProgressLineTests
{
    private static string Shown(bool quiet, bool terminal, bool colour)
    {
        using var writer = new StringWriter();
        using (var line = new ProgressLine(writer, quiet, terminal, colour))
        {
            for (var k = 0; k <= 100; k++)
                line.Show(k, 100, "jko");
        }

        return writer.ToString();
    }

    [Fact]
    public void Show_Piped_WritesPlainLinesATenthApart()
    {
        var lines = Shown(quiet: false, terminal: false, colour: true).Split('\n', StringSplitOptions.RemoveEmptyEntries);
        Assert.Equal(11, lines.Length);
        Assert.All(lines, line => Assert.DoesNotContain('\u001b', line));
        Assert.StartsWith("100 %", lines[^1], StringComparison.Ordinal);
    }

    [Fact]
    public void Show_Quiet_WritesNothing() => Assert.Empty(Shown(quiet: true, terminal: true, colour: true));

    [Fact]
    public void Show_TerminalWithoutColour_DrawsABarAndClearsIt()
    {
        var text = Shown(quiet: false, terminal: true, colour: false);
        Assert.Contains("100 %", text, StringComparison.Ordinal);
        Assert.DoesNotContain("[36m", text, StringComparison.Ordinal);
        Assert.EndsWith("\r\u001b[K", text, StringComparison.Ordinal);
    }
}
