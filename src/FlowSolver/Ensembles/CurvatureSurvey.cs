using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>Extremes of the derivatives of V on a domain, found by sampling: a picture, not a bound.</summary>
/// <param name="Least">Least eigenvalue of D²V, in units of energy per length².</param>
/// <param name="Largest">Largest eigenvalue of D²V.</param>
/// <param name="LargestAtX">Where the largest was found.</param>
/// <param name="LargestAtY">Where the largest was found; 0 in one dimension.</param>
/// <param name="LargestSlope">Largest |∂V/∂x|, |∂V/∂y|, in units of energy per length.</param>
public sealed record CurvatureSurvey(double Least, double Largest, double LargestAtX, double LargestAtY, double LargestSlope)
{
    private const int Points1 = 4096;
    private const int Points2 = 128;

    /// <summary>Samples the middles of 4096 equal parts of an interval, or of 128 × 128 of a rectangle; points where V has no finite derivatives are left out.</summary>
    public static CurvatureSurvey Of(Potential potential, Domain domain)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        var columns = domain.Y is null ? Points1 : Points2;
        var rows = domain.Y is null ? 1 : Points2;
        var x = new double[columns];
        var y = new double[domain.Y is null ? 0 : columns];
        for (var i = 0; i < columns; i++)
            x[i] = domain.X.From + (i + 0.5) / columns * domain.X.Length;
        double[] value = new double[columns], gx = new double[columns], gy = new double[y.Length], hxx = new double[columns], hxy = new double[y.Length], hyy = new double[y.Length];
        double least = double.PositiveInfinity, largest = double.NegativeInfinity, slope = 0, atX = 0, atY = 0;
        for (var row = 0; row < rows; row++)
        {
            if (domain.Y is not null)
                Array.Fill(y, domain.Y.From + (row + 0.5) / rows * domain.Y.Length);
            potential.Jet(x, y, new PotentialJet { Value = value, GradientX = gx, GradientY = gy, HessianXX = hxx, HessianXY = hxy, HessianYY = hyy });
            for (var i = 0; i < columns; i++)
            {
                double low = hxx[i], high = hxx[i];
                if (domain.Y is not null)
                {
                    var middle = 0.5 * (hxx[i] + hyy[i]);
                    var radius = Math.Sqrt(0.25 * (hxx[i] - hyy[i]) * (hxx[i] - hyy[i]) + hxy[i] * hxy[i]);
                    (low, high) = (middle - radius, middle + radius);
                }

                if (!double.IsFinite(low) || !double.IsFinite(high))
                    continue;
                least = Math.Min(least, low);
                if (high > largest)
                    (largest, atX, atY) = (high, x[i], domain.Y is null ? 0 : y[i]);
                var steep = Math.Max(Math.Abs(gx[i]), domain.Y is null ? 0 : Math.Abs(gy[i]));
                if (double.IsFinite(steep))
                    slope = Math.Max(slope, steep);
            }
        }

        return double.IsFinite(least) ? new CurvatureSurvey(least, largest, atX, atY, slope) : new CurvatureSurvey(0, 0, 0, 0, slope);
    }
}
