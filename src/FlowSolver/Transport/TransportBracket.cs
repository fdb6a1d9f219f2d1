namespace FlowSolver.Transport;

/// <summary>A Wasserstein-2 distance with the bounds that are proved for it, in units of length.</summary>
/// <param name="Distance">Best value.</param>
/// <param name="Low">Lower bound.</param>
/// <param name="High">Upper bound.</param>
public readonly record struct TransportBracket(double Distance, double Low, double High)
{
    /// <summary>A distance known to rounding, as in one dimension.</summary>
    public static TransportBracket Exact(double distance) => new(distance, distance, distance);
}
