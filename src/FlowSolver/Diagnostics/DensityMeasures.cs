namespace FlowSolver.Diagnostics;

/// <summary>Mass, mean and covariance. In one dimension the y parts are 0 and not shown.</summary>
/// <param name="Mass">Total mass; 1 up to rounding.</param>
/// <param name="MeanX">Mean of x.</param>
/// <param name="VarianceX">Variance of x.</param>
/// <param name="MeanY">Mean of y.</param>
/// <param name="VarianceY">Variance of y.</param>
/// <param name="Covariance">Covariance of x and y.</param>
public readonly record struct Moments(
    double Mass, double MeanX, double VarianceX, double MeanY = 0, double VarianceY = 0, double Covariance = 0);
