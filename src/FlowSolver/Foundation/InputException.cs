using System.Globalization;
using System.Text;

namespace FlowSolver.Foundation;

/// <summary>One fault in what the user handed in.</summary>
/// <param name="Message">One sentence: what was found and what the rule is.</param>
/// <param name="Remedy">What would do, as a sentence; null where the message already says it.</param>
/// <param name="File">The file at fault as the user named it; null where there is none.</param>
/// <param name="Line">The line at fault, counted from 1; null where there is none.</param>
/// <param name="Column">The column at fault, counted from 1; null where there is none.</param>
/// <param name="Key">The dotted key of a case file, such as <c>time.step</c>; null where there is none.</param>
/// <param name="Detail">Further lines shown indented below the sentence, such as a formula with a caret under the fault; null where there are none.</param>
public sealed record InputFault(
    string Message, string? Remedy = null, string? File = null, int? Line = null, int? Column = null, string? Key = null, string? Detail = null)
{
    /// <summary>The fault as it is printed: <c>file:line: key: sentence remedy</c>, then the detail lines.</summary>
    public override string ToString()
    {
        var text = new StringBuilder();
        if (File is not null)
            text.Append(File).Append(Line is { } line ? ":" + line.ToString(CultureInfo.InvariantCulture) : "").Append(": ");
        if (Key is not null)
            text.Append(Key).Append(": ");
        text.Append(Message);
        if (Remedy is not null)
            text.Append(' ').Append(Remedy);
        if (Detail is not null)
        {
            foreach (var line in Detail.Split('\n'))
                text.Append("\n    ").Append(line);
        }

        return text.ToString();
    }
}

/// <summary>
/// The one exception for bad input: a case file, a formula, a samples file, an option. Carries every fault found, not only the first.
/// The command line turns it into exit status 2.
/// </summary>
public sealed class InputException : Exception
{
    /// <summary>Creates an exception with one fault without a place.</summary>
    public InputException(string message) : this([new InputFault(message)]) { }

    /// <summary>Creates an exception with one fault and the exception that revealed it.</summary>
    public InputException(string message, Exception innerException) : base(message, innerException)
        => Faults = [new InputFault(message)];

    /// <summary>Creates an exception without a message; prefer the other constructors.</summary>
    public InputException() : this("The input could not be used.") { }

    /// <summary>Creates an exception from one or more faults.</summary>
    public InputException(IReadOnlyList<InputFault> faults) : base(string.Join('\n', faults ?? []))
        => Faults = faults is { Count: > 0 } ? faults : [new InputFault("The input could not be used.")];

    /// <summary>Creates an exception from one fault.</summary>
    public InputException(InputFault fault) : this([fault]) { }

    /// <summary>All faults, in the order in which they stand in the input; never empty.</summary>
    public IReadOnlyList<InputFault> Faults { get; }
}
