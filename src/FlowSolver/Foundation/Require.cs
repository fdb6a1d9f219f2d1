using System.Diagnostics.CodeAnalysis;
using System.Globalization;
using System.Runtime.CompilerServices;

namespace FlowSolver.Foundation;

/// <summary>
/// Argument checks at the public edge. Every message has the form
/// <c>&lt;what&gt; was &lt;value&gt;; it must be &lt;rule&gt;.</c>, with not-a-number and infinity named as such.
/// </summary>
public static class Require
{
    /// <summary>Returns <paramref name="value"/> when it is neither NaN nor infinite.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="value"/> is NaN or infinite.</exception>
    public static double Finite(double value, [CallerArgumentExpression(nameof(value))] string name = "value")
        => double.IsFinite(value) ? value : throw Fault(name, value, "finite");

    /// <summary>Returns <paramref name="value"/> when it is finite and above zero.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="value"/> is not finite or not above zero.</exception>
    public static double Positive(double value, [CallerArgumentExpression(nameof(value))] string name = "value")
        => double.IsFinite(value) && value > 0 ? value : throw Fault(name, value, "finite and above 0");

    /// <summary>Returns <paramref name="value"/> when it is finite and not below zero.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="value"/> is not finite or below zero.</exception>
    public static double NotNegative(double value, [CallerArgumentExpression(nameof(value))] string name = "value")
        => double.IsFinite(value) && value >= 0 ? value : throw Fault(name, value, "finite and not below 0");

    /// <summary>Returns <paramref name="value"/> when it is at least <paramref name="least"/>.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="value"/> is below <paramref name="least"/>.</exception>
    public static int AtLeast(int value, int least, [CallerArgumentExpression(nameof(value))] string name = "value")
        => value >= least ? value : throw new ArgumentOutOfRangeException(
            name, string.Create(CultureInfo.InvariantCulture, $"{name} was {value}; it must be at least {least}."));

    /// <summary>Checks that a span has the length that its partner fixes.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static void Length(int found, int needed, [CallerArgumentExpression(nameof(found))] string name = "length")
    {
        if (found != needed)
            ThrowLength(found, needed, name);
    }

    /// <summary>Checks a condition that has no shorter name here.</summary>
    /// <exception cref="ArgumentException"><paramref name="condition"/> is false; <paramref name="message"/> is the whole sentence.</exception>
    public static void That([DoesNotReturnIf(false)] bool condition, string message)
    {
        if (!condition)
            throw new ArgumentException(message);
    }

    private static ArgumentOutOfRangeException Fault(string name, double value, string rule)
    {
        var found = double.IsNaN(value) ? "not a number" : value.ToString("R", CultureInfo.InvariantCulture);
        return new ArgumentOutOfRangeException(name, $"{name} was {found}; it must be {rule}.");
    }

    private static void ThrowLength(int found, int needed, string name) => throw new ArgumentException(
        string.Create(CultureInfo.InvariantCulture, $"{name} was {found}; it must be {needed}."), name);
}
