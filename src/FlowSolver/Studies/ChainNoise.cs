using FlowSolver.Diagnostics;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;
using SpecialFunctions = MathNet.Numerics.SpecialFunctions;

namespace FlowSolver.Studies;

/// <summary>
/// The noise of one long chain: distances from the law of simulated chains that have the law as stationary law and the same autocorrelation time.
/// </summary>
/// <remarks>
/// A simulated chain is a Gaussian autoregression of first order, z_{k+1} = φ z_k + √(1 − φ²) ξ, with φ = (τ − 1)/(τ + 1) so that its integrated
/// autocorrelation time is τ, mapped to the law by x = Q(Φ(z)). For an Ornstein-Uhlenbeck chain or any of its monotone images this is the chain's own
/// law, so that the p-value is exact up to the error of τ; for other chains it is a model that gives every observable the slowest correlation, which
/// errs towards calling a right sampler right. One dimension only.
/// </remarks>
public static class ChainNoise
{
    private const int LongestSimulated = 400_000;
    private const uint Purpose = StreamPurpose.Simulation + 8;

    /// <summary>Simulates; null in two dimensions.</summary>
    /// <param name="density">The law.</param>
    /// <param name="count">Length of the chain.</param>
    /// <param name="autocorrelationTime">τ in steps.</param>
    /// <param name="draws">Number of simulated chains.</param>
    /// <param name="seed">Seed.</param>
    /// <param name="team">Threads; the result does not depend on their number.</param>
    /// <param name="cancellation">Stops between two chains.</param>
    public static NoiseFloor? Simulate(
        Density density, int count, double autocorrelationTime, int draws, ulong seed, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(team);
        if (density.Grid.Dimension != 1)
            return null;
        Require.AtLeast(count, 2);
        var coefficient = Math.Max(0, (autocorrelationTime - 1) / (autocorrelationTime + 1));
        // Far below the autocorrelation time neighbours carry the same news: leaving some out changes the noise by less than its own spread.
        var stride = Math.Clamp(Math.Min((int)(autocorrelationTime / 8), (count + LongestSimulated - 1) / LongestSimulated), 1, count / 2);
        var length = count / stride;
        var thinned = Math.Pow(coefficient, stride);
        var quantile = new QuantileFunction(density);
        var distances = new double[draws];
        team.Run(draws, draw =>
        {
            cancellation.ThrowIfCancellationRequested();
            var chain = new double[length];
            new NormalDraws(seed, Purpose, (uint)draw).Fill(0, chain);
            var fresh = Math.Sqrt(1 - thinned * thinned);
            for (var k = 1; k < length; k++)
                chain[k] = thinned * chain[k - 1] + fresh * chain[k];
            Array.Sort(chain);
            for (var k = 0; k < length; k++)
                chain[k] = quantile.Position(0.5 * SpecialFunctions.Erfc(-chain[k] / Math.Sqrt(2)));
            distances[draw] = density.Grid.X.IsPeriodic ? CircleTransport.Distance(chain, density) : LineTransport.Distance(chain, density);
        });
        return new NoiseFloor(distances);
    }
}
