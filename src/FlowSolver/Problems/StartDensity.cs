using FlowSolver.Foundation;

namespace FlowSolver.Problems;

/// <summary>Where the walkers are at time 0; see the derived types. What lies outside the domain is cut off at walls and wrapped on a circle; the rest is normalised.</summary>
public abstract record StartDensity
{
    /// <summary>How the start is shown to a reader.</summary>
    public abstract string Description { get; }
}

/// <summary>A normal density.</summary>
/// <param name="MeanX">Mean of x.</param>
/// <param name="VarianceX">Variance of x, above 0.</param>
/// <param name="MeanY">Mean of y; 0 in one dimension.</param>
/// <param name="VarianceY">Variance of y; 0 in one dimension.</param>
/// <param name="Covariance">Covariance of x and y; 0 in one dimension.</param>
public sealed record GaussianStart(
    double MeanX, double VarianceX, double MeanY = 0, double VarianceY = 0, double Covariance = 0) : StartDensity
{
    /// <inheritdoc/>
    public override string Description => "normal density";
}

/// <summary>A density proportional to a given function, which must be finite and not negative on the domain.</summary>
/// <param name="Function">The function; need not be normalised.</param>
/// <param name="Text">How it is shown to a reader, such as its formula.</param>
/// <param name="IsSmooth">Whether it has no jumps and no kinks.</param>
public sealed record FunctionStart(BatchFunction Function, string Text, bool IsSmooth = true) : StartDensity
{
    /// <inheritdoc/>
    public override string Description => Text;
}

/// <summary>The histogram of given samples.</summary>
/// <param name="X">First coordinates.</param>
/// <param name="Y">Second coordinates, of the same length; null in one dimension.</param>
/// <param name="Source">Where they came from, for the reader.</param>
public sealed record SamplesStart(double[] X, double[]? Y, string Source) : StartDensity
{
    /// <inheritdoc/>
    public override string Description => Source;
}
