using System.Numerics;
using FlowSolver.Foundation;
using MathNet.Numerics.IntegralTransforms;

namespace FlowSolver.Studies;

/// <summary>The integrated autocorrelation time of one observable along a chain, in steps of the chain.</summary>
/// <param name="Time">τ = 1 + 2 Σ_{k≥1} ρ(k), summed up to the window; at least 1 for positively correlated chains. 1 means independent.</param>
/// <param name="Window">Number of lags summed.</param>
/// <param name="IsReliable">Whether the chain is long enough for the estimate to mean something: at least 50 times τ.</param>
/// <remarks>
/// Autocovariances by fast Fourier transform; the window is the smallest W with W ≥ 6 τ(W) (A. Sokal, Monte Carlo methods in statistical mechanics:
/// foundations and new algorithms, in Functional Integration, Plenum 1997, section 3, from memory).
/// </remarks>
public readonly record struct AutocorrelationTime(double Time, int Window, bool IsReliable)
{
    private const double WindowFactor = 6;

    /// <summary>Estimates τ of a series. A constant series has τ equal to its length.</summary>
    public static AutocorrelationTime Of(ReadOnlySpan<double> series)
    {
        var n = Require.AtLeast(series.Length, 2);
        var mean = SpanKernels.Sum(series) / n;
        // Padded with zeros to twice the length, so that the circular correlation is the plain one.
        var size = (int)BitOperations.RoundUpToPowerOf2((uint)(2 * n));
        var data = new Complex[size];
        for (var i = 0; i < n; i++)
            data[i] = series[i] - mean;
        Fourier.Forward(data, FourierOptions.NoScaling);
        for (var i = 0; i < size; i++)
            data[i] = data[i].Real * data[i].Real + data[i].Imaginary * data[i].Imaginary;
        Fourier.Inverse(data, FourierOptions.NoScaling);
        var variance = data[0].Real;
        if (!(variance > 0))
            return new AutocorrelationTime(n, n, false);
        var time = 1.0;
        for (var window = 1; window < n; window++)
        {
            time += 2 * data[window].Real / variance;
            if (window >= WindowFactor * time)
                return new AutocorrelationTime(Math.Max(time, 1e-3), window, n >= 50 * time);
        }

        return new AutocorrelationTime(Math.Max(time, 1), n - 1, false);
    }
}
