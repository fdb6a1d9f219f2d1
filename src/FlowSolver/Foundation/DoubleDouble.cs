namespace FlowSolver.Foundation;

/// <summary>
/// A number held as an unevaluated sum of two doubles, good to about 32 digits. For running sums whose small differences matter, such as the
/// cumulative masses of two densities that hardly differ.
/// </summary>
/// <remarks>
/// Error-free sums and products as in T. J. Dekker, A floating-point technique for extending the available precision, Numer. Math. 18 (1971)
/// 224-242, and D. E. Knuth, The Art of Computer Programming, vol. 2, section 4.2.2. From memory.
/// </remarks>
internal readonly struct DoubleDouble
{
    public DoubleDouble(double high, double low)
    {
        High = high;
        Low = low;
    }

    /// <summary>The number rounded to a double.</summary>
    public double High { get; }

    /// <summary>What <see cref="High"/> leaves out.</summary>
    public double Low { get; }

    public static implicit operator DoubleDouble(double value) => new(value, 0);

    public static DoubleDouble operator +(DoubleDouble a, double b)
    {
        var sum = a.High + b;
        var part = sum - a.High;
        var error = (a.High - (sum - part)) + (b - part);
        return Quick(sum, error + a.Low);
    }

    public static DoubleDouble operator +(DoubleDouble a, DoubleDouble b)
    {
        var sum = a.High + b.High;
        var part = sum - a.High;
        var error = (a.High - (sum - part)) + (b.High - part);
        return Quick(sum, error + (a.Low + b.Low));
    }

    public static DoubleDouble operator *(DoubleDouble a, DoubleDouble b)
    {
        var product = a.High * b.High;
        var error = Math.FusedMultiplyAdd(a.High, b.High, -product);
        return Quick(product, error + (a.High * b.Low + a.Low * b.High));
    }

    public static bool operator <(DoubleDouble a, DoubleDouble b) => a.High < b.High || (a.High == b.High && a.Low < b.Low);

    public static bool operator >(DoubleDouble a, DoubleDouble b) => b < a;

    /// <summary>a − b rounded to a double, with nearly full relative accuracy also when the two are close.</summary>
    public static double Difference(DoubleDouble a, DoubleDouble b)
    {
        var sum = a.High - b.High;
        var part = sum - a.High;
        var error = (a.High - (sum - part)) + (-b.High - part);
        return sum + (error + (a.Low - b.Low));
    }

    /// <summary>numerator/denominator of two doubles.</summary>
    public static DoubleDouble Ratio(double numerator, double denominator)
    {
        var quotient = numerator / denominator;
        return new DoubleDouble(quotient, Math.FusedMultiplyAdd(-quotient, denominator, numerator) / denominator);
    }

    /// <summary>1/a.</summary>
    public static DoubleDouble Reciprocal(DoubleDouble a)
    {
        var first = 1 / a.High;
        var rest = Math.FusedMultiplyAdd(-first, a.High, 1) - first * a.Low;
        return Quick(first, rest * first);
    }

    private static DoubleDouble Quick(double high, double low)
    {
        var sum = high + low;
        return new DoubleDouble(sum, low - (sum - high));
    }
}
