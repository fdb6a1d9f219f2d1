using System.Diagnostics;
using CsCheck;
using FlowSolver.Foundation;

namespace FlowSolver.Tests.CaseFiles;

/// <summary>
/// Random text and random damage. Whatever comes in, it is either a case or a list of faults with places, and soon. Mutation tried: the limit on the
/// parts of a dotted key left out; the test of long keys no longer ended in time.
/// </summary>
public class CaseNoiseTests
{
    private static void ReadSomehow(string text)
    {
        try
        {
            CaseTexts.Read(text);
        }
        catch (InputException exception)
        {
            Assert.NotEmpty(exception.Faults);
            Assert.All(exception.Faults, fault =>
            {
                Assert.EndsWith(".", fault.Message, StringComparison.Ordinal);
                Assert.True(fault.Message.Length < 2000, fault.Message);
                Assert.True(fault.Line is null or > 0);
            });
        }
    }

    [Fact]
    public void Parse_RandomText_NeverCrashes()
        => Gen.OneOf(
            Gen.String[Gen.Char, 0, 400],
            Gen.String[Gen.OneOf("[]{}=\"'.,#\n -+eE0123456789abcdxyinf_\\u\t\r".ToCharArray()), 0, 400],
            Gen.OneOf("[domain]\n", "x = ", "{ from = 0", ", to = 1", ", cells = 8 }\n", "[energy]\n", "potential = ", "\"x^2\"\n", "\"", "temperature = 1\n", "[start]\n", "density = ",
                "\"1\"\n", "[time]\n", "until = 1\n", "step = 0.1\n", "[[", "]]", "at = [", "1, ", "]\n", "'''", "\"\"\"", "1979-05-27", "nan", "[methods]\n", "flow = [\"exact\"]\n", "= =", "a.b.c = 1\n")
                .Array[0, 40].Select(parts => string.Concat(parts)))
            .Sample(ReadSomehow, iter: 4000);

    /// <summary>Right cases with a few places damaged: characters changed, removed, doubled; lines removed, doubled and swapped.</summary>
    [Fact]
    public void Parse_DamagedCase_NeverCrashes()
    {
        var damage = Gen.Select(Gen.Int[0, 6], Gen.Int[0, 100000], Gen.Char, Gen.OneOf("0", "-1", "1e400", "nan", "\"\"", "[]", "{}", "\n", "9999999999", "1e-300", "[", "\""));
        Gen.Select(Gen.Bool, damage.Array[1, 4]).Sample((isPlane, steps) =>
        {
            var text = isPlane ? CaseTexts.Plane : CaseTexts.Line;
            foreach (var (kind, place, character, token) in steps)
                text = Damage(text, kind, place, character, token);
            ReadSomehow(text);
        }, iter: 1500);
    }

    private static string Damage(string text, int kind, int place, char character, string token)
    {
        if (text.Length == 0)
            return token;
        var at = place % text.Length;
        if (kind <= 3)
        {
            return kind switch
            {
                0 => text[..at] + character + text[(at + 1)..],
                1 => text.Remove(at, 1),
                2 => text[..at] + token + text[at..],
                _ => text[..at],
            };
        }

        var lines = text.Split('\n').ToList();
        var line = place % lines.Count;
        switch (kind)
        {
            case 4:
                lines.RemoveAt(line);
                break;
            case 5:
                lines.Insert(line, lines[line]);
                break;
            default:
                // A value replaced as a whole.
                var equals = lines[line].IndexOf('=', StringComparison.Ordinal);
                if (equals >= 0)
                    lines[line] = lines[line][..(equals + 1)] + " " + token;
                break;
        }

        return string.Join('\n', lines);
    }

    [Theory]
    [InlineData("a.", 100000, "b = 1")]
    [InlineData("[", 200000, "")]
    [InlineData("a = [", 100000, "")]
    [InlineData("{a=", 100000, "")]
    [InlineData("[a]\n", 20000, "")]
    [InlineData("a = 1\n", 20000, "")]
    [InlineData("\"", 100000, "")]
    [InlineData("x = \"\\u00e9\"\n", 5000, "")]
    public void Parse_LongRepetition_EndsInTime(string part, int times, string end)
    {
        var watch = Stopwatch.StartNew();
        ReadSomehow(string.Concat(Enumerable.Repeat(part, times)) + end);
        Assert.True(watch.Elapsed < TimeSpan.FromSeconds(20), $"{watch.Elapsed}");
    }

    /// <summary>What is too large is refused before memory is taken for it.</summary>
    [Theory]
    [InlineData("cells = 64", "cells = 1048577")]
    [InlineData("walkers = 1000", "walkers = 2000000000")]
    [InlineData("reports = 11", "reports = 2000000000")]
    [InlineData("step = 0.02", "step = 1e-12")]
    public void Parse_TooLarge_TakesNoMemory(string find, string replacement)
    {
        var text = CaseTexts.With(CaseTexts.Line, find, replacement);
        Assert.Throws<InputException>(() => CaseTexts.Read(text));
        var before = GC.GetAllocatedBytesForCurrentThread();
        Assert.Throws<InputException>(() => CaseTexts.Read(text));
        Assert.InRange(GC.GetAllocatedBytesForCurrentThread() - before, 0, 2_000_000);
    }
}
