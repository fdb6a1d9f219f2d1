namespace FlowSolver.Reporting.Samples;

/// <summary>Samples from a file: positions of walkers, one a row.</summary>
/// <param name="X">First coordinates, all finite.</param>
/// <param name="Y">Second coordinates, of the same length; null in one dimension.</param>
/// <param name="Time">Times, of the same length; null where the file has none.</param>
/// <param name="Source">The file as the user named it.</param>
public sealed record SampleSet(double[] X, double[]? Y, double[]? Time, string Source)
{
    /// <summary>Number of samples.</summary>
    public int Count => X.Length;
}
