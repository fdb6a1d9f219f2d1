using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Reporting.Samples;

/// <summary>Checks on many samples at once.</summary>
internal static class SamplesKernels
{
    /// <summary>Index of the first value that is NaN or infinite; −1 when there is none.</summary>
    public static int FirstNotFinite(ReadOnlySpan<double> values)
    {
        var lanes = Vector512<double>.Count;
        var vectors = MemoryMarshal.Cast<double, Vector512<double>>(values);
        for (var i = 0; i < vectors.Length; i++)
        {
            // v − v is 0 for finite values and NaN for the others.
            if (!Vector512.EqualsAll(vectors[i] - vectors[i], Vector512<double>.Zero))
                return i * lanes + ScanFor(values.Slice(i * lanes, lanes));
        }

        var rest = ScanFor(values[(vectors.Length * lanes)..]);
        return rest < 0 ? -1 : vectors.Length * lanes + rest;
    }

    private static int ScanFor(ReadOnlySpan<double> values)
    {
        for (var i = 0; i < values.Length; i++)
        {
            if (!double.IsFinite(values[i]))
                return i;
        }

        return -1;
    }
}
