using System.Globalization;

namespace FlowSolver.Reporting;

/// <summary>How numbers are written: one place, so that tables, figures and the page agree.</summary>
public static class Numbers
{
    /// <summary>The shortest text that reads back as the same number, in the invariant culture. Minus zero is written as 0.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="value"/> is NaN or infinite: neither is ever written.</exception>
    public static string Exact(double value)
        => double.IsFinite(value)
            ? (value + 0.0).ToString("R", CultureInfo.InvariantCulture)
            : throw new ArgumentOutOfRangeException(nameof(value), $"The number was {Name(value)}; it must be finite. Leave the cell empty where a quantity does not exist.");

    /// <summary>A number for reading: <paramref name="digits"/> significant digits, trailing zeros dropped, powers of ten outside 10⁻⁴ … 10⁶.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="value"/> is NaN or infinite.</exception>
    public static string Short(double value, int digits = 4)
    {
        if (!double.IsFinite(value))
            throw new ArgumentOutOfRangeException(nameof(value), $"The number was {Name(value)}; it must be finite. Leave the cell empty where a quantity does not exist.");
        if (value == 0)
            return "0";
        var (mantissa, exponent) = Rounded(value, digits);
        if (exponent is < -4 or >= 6)
            return Trimmed(mantissa, digits - 1) + "e" + exponent.ToString(CultureInfo.InvariantCulture);
        var decimals = Math.Max(0, digits - 1 - exponent);
        // The decimal text of the rounded number, not the rounding of a binary product: 1.005 and 0.1 come out as they read.
        var rounded = double.Parse(Trimmed(mantissa, digits - 1) + "e" + exponent.ToString(CultureInfo.InvariantCulture), CultureInfo.InvariantCulture);
        return Trimmed(rounded, decimals);
    }

    /// <summary>The same for a value that may not exist; empty then.</summary>
    public static string Short(double? value, int digits = 4) => value is { } number ? Short(number, digits) : "";

    /// <summary>NaN and infinity by name.</summary>
    internal static string Name(double value)
        => double.IsNaN(value) ? "not a number" : value > 0 ? "infinite" : "minus infinity";

    private static (double Mantissa, int Exponent) Rounded(double value, int digits)
    {
        var text = value.ToString("E" + (digits - 1).ToString(CultureInfo.InvariantCulture), CultureInfo.InvariantCulture);
        var split = text.IndexOf('E', StringComparison.Ordinal);
        return (double.Parse(text.AsSpan(0, split), CultureInfo.InvariantCulture), int.Parse(text.AsSpan(split + 1), NumberStyles.AllowLeadingSign, CultureInfo.InvariantCulture));
    }

    private static string Trimmed(double value, int decimals)
    {
        var text = value.ToString("F" + decimals.ToString(CultureInfo.InvariantCulture), CultureInfo.InvariantCulture);
        return text.Contains('.', StringComparison.Ordinal) ? text.TrimEnd('0').TrimEnd('.') : text;
    }
}
