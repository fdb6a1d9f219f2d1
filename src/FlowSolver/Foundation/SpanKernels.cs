using System.Numerics;
using System.Runtime.InteropServices;

namespace FlowSolver.Foundation;

/// <summary>
/// Sums and products over spans. The order of summation depends on the length only, never on the width of the machine's vectors or the
/// number of threads, so that runs repeat to the byte.
/// </summary>
public static class SpanKernels
{
    // Eight partial sums, whatever the hardware: a fixed order that the widest vectors can follow.
    private const int Lanes = 8;

    /// <summary>Σ aᵢ.</summary>
    public static double Sum(ReadOnlySpan<double> a)
    {
        Span<double> part = stackalloc double[Lanes];
        part.Clear();
        var whole = a.Length - a.Length % Lanes;
        for (var i = 0; i < whole; i += Lanes)
        {
            var block = a.Slice(i, Lanes);
            for (var k = 0; k < Lanes; k++)
                part[k] += block[k];
        }

        return Combine(part, Tail(a[whole..]));
    }

    /// <summary>Σ aᵢ bᵢ.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static double Dot(ReadOnlySpan<double> a, ReadOnlySpan<double> b)
    {
        Require.Length(b.Length, a.Length);
        Span<double> part = stackalloc double[Lanes];
        part.Clear();
        var whole = a.Length - a.Length % Lanes;
        for (var i = 0; i < whole; i += Lanes)
        {
            var left = a.Slice(i, Lanes);
            var right = b.Slice(i, Lanes);
            for (var k = 0; k < Lanes; k++)
                part[k] += left[k] * right[k];
        }

        var tail = 0.0;
        for (var i = whole; i < a.Length; i++)
            tail += a[i] * b[i];
        return Combine(part, tail);
    }

    /// <summary>max |aᵢ|; NaN when any element is NaN; 0 for an empty span.</summary>
    public static double MaxAbs(ReadOnlySpan<double> a)
    {
        var max = 0.0;
        foreach (var value in a)
            max = Math.Max(max, Math.Abs(value));
        return max;
    }

    /// <summary>target ← factor · target.</summary>
    public static void Scale(Span<double> target, double factor)
    {
        var vectors = MemoryMarshal.Cast<double, Vector<double>>(target);
        for (var i = 0; i < vectors.Length; i++)
            vectors[i] *= factor;
        for (var i = vectors.Length * Vector<double>.Count; i < target.Length; i++)
            target[i] *= factor;
    }

    /// <summary>target ← target + factor · a.</summary>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public static void AddScaled(Span<double> target, double factor, ReadOnlySpan<double> a)
    {
        Require.Length(a.Length, target.Length);
        var targets = MemoryMarshal.Cast<double, Vector<double>>(target);
        var sources = MemoryMarshal.Cast<double, Vector<double>>(a);
        var scale = new Vector<double>(factor);
        for (var i = 0; i < targets.Length; i++)
            targets[i] += scale * sources[i];
        for (var i = targets.Length * Vector<double>.Count; i < target.Length; i++)
            target[i] += factor * a[i];
    }

    private static double Tail(ReadOnlySpan<double> rest)
    {
        var sum = 0.0;
        foreach (var value in rest)
            sum += value;
        return sum;
    }

    private static double Combine(ReadOnlySpan<double> part, double tail)
        => ((part[0] + part[1]) + (part[2] + part[3])) + ((part[4] + part[5]) + (part[6] + part[7])) + tail;
}
