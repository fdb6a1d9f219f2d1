using System.Numerics;
using System.Runtime.InteropServices;

namespace FlowSolver.Foundation;

/// <summary>
/// Convolution of a long line with a very wide normal density in three narrower ones: down to q times wider cells, along those, and back up. Normal densities
/// add their variances, so that the three together are the one asked for; all weights are positive.
/// </summary>
/// <remarks>
/// All parts have a deviation of at least 1.84 wide cells: sums of products of two of them over places one wide cell apart are then integrals to 6e-15 (Poisson summation).
/// About 86 multiplications a cell for the two, whatever the width, and q² times fewer than direct for the rest.
/// Not safe for use from two threads at once.
/// </remarks>
internal sealed class WideLineConvolution
{
    // Deviation of each part in wide cells, at least: the product of two neighbouring parts is then 1.3 wide cells wide, where GaussianKernel too begins to sample.
    private const double PartDeviation = 1.84;

    private readonly int ratio;
    private readonly int downRadius;
    private readonly int upRadius;
    private readonly double[] downWeights;
    private readonly double[][] upWeights;
    private readonly int[] downSource;
    private readonly int[] upSource;
    private readonly double[] line;
    private readonly double[] wide;
    private readonly double[] wideLine;
    private readonly double[] phase;
    private readonly GaussianConvolution along;

    private WideLineConvolution(int count, bool periodic, double variance, int ratio)
    {
        this.ratio = ratio;
        var end = PartDeviation * PartDeviation * ratio * ratio;
        var reach = Math.Sqrt(-2 * end * Math.Log(GaussianKernel.Cutoff));
        // Wide cell j has its centre at fine place q·j + (q − 1)/2.
        var middle = 0.5 * (ratio - 1);
        downRadius = (int)Math.Ceiling(reach);
        downWeights = new double[2 * downRadius + ratio];
        for (var k = 0; k < downWeights.Length; k++)
            downWeights[k] = Math.Exp(-0.5 * Math.Pow(k - downRadius - middle, 2) / end);
        Scale(downWeights, 1);
        upRadius = (int)Math.Ceiling(reach / ratio);
        upWeights = new double[ratio][];
        for (var p = 0; p < ratio; p++)
        {
            upWeights[p] = new double[2 * upRadius + 1];
            for (var k = 0; k < upWeights[p].Length; k++)
                upWeights[p][k] = Math.Exp(-0.5 * Math.Pow((k - upRadius) * ratio + middle - p, 2) / end);
            Scale(upWeights[p], 1);
        }

        var coarse = count / ratio;
        downSource = Continued(count, downRadius, periodic);
        upSource = Continued(coarse, upRadius, periodic);
        line = new double[downSource.Length];
        wide = new double[coarse];
        wideLine = new double[upSource.Length];
        phase = new double[coarse];
        along = new GaussianConvolution(coarse, 1, periodic, false, (variance - 2 * end) / (ratio * (double)ratio), 0);
    }

    /// <summary>Prepares it; null where the line does not divide into wide cells or the density is not wide enough.</summary>
    public static WideLineConvolution? TryCreate(int count, bool periodic, double variance)
    {
        var ratio = 1;
        while (count % (2 * ratio) == 0 && count / (2 * ratio) >= 16 && 3 * Math.Pow(PartDeviation * 2 * ratio, 2) <= variance)
            ratio *= 2;
        return ratio < 8 ? null : new WideLineConvolution(count, periodic, variance, ratio);
    }

    /// <summary>Writes the smoothed line; <paramref name="destination"/> may be <paramref name="source"/>.</summary>
    public void Apply(ReadOnlySpan<double> source, Span<double> destination)
    {
        for (var k = 0; k < line.Length; k++)
            line[k] = source[downSource[k]];
        for (var j = 0; j < wide.Length; j++)
            wide[j] = Dot(downWeights, line.AsSpan(j * ratio, downWeights.Length));
        along.Apply(wide, wide, WorkerTeam.Alone);
        for (var k = 0; k < wideLine.Length; k++)
            wideLine[k] = wide[upSource[k]];
        for (var p = 0; p < ratio; p++)
        {
            phase.AsSpan().Clear();
            for (var k = 0; k < upWeights[p].Length; k++)
                SpanKernels.AddScaled(phase, upWeights[p][k], wideLine.AsSpan(k, phase.Length));
            for (var j = 0; j < phase.Length; j++)
                destination[j * ratio + p] = phase[j];
        }
    }

    private static double Dot(ReadOnlySpan<double> a, ReadOnlySpan<double> b)
    {
        // Eight sums in a fixed order whatever the machine's vectors.
        Span<double> sums = stackalloc double[8];
        sums.Clear();
        var parts = MemoryMarshal.Cast<double, Vector<double>>(sums);
        var left = MemoryMarshal.Cast<double, Vector<double>>(a[..(a.Length / 8 * 8)]);
        var right = MemoryMarshal.Cast<double, Vector<double>>(b[..(a.Length / 8 * 8)]);
        for (var i = 0; i < left.Length; i++)
            parts[i % parts.Length] += left[i] * right[i];
        var sum = 0.0;
        for (var i = a.Length / 8 * 8; i < a.Length; i++)
            sum += a[i] * b[i];
        foreach (var part in sums)
            sum += part;
        return sum;
    }

    private static void Scale(double[] weights, double sum)
    {
        var total = 0.0;
        foreach (var weight in weights)
            total += weight;
        SpanKernels.Scale(weights, sum / total);
    }

    private static int[] Continued(int count, int radius, bool periodic)
    {
        var period = periodic ? count : 2 * count;
        var places = new int[count + 2 * radius];
        for (var k = 0; k < places.Length; k++)
        {
            var place = ((k - radius) % period + period) % period;
            places[k] = place < count ? place : period - 1 - place;
        }

        return places;
    }
}
