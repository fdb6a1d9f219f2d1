namespace FlowSolver.Foundation;

/// <summary>A scalar function of position, evaluated for many points at once.</summary>
/// <param name="x">First coordinates.</param>
/// <param name="y">Second coordinates, of the same length; empty for a function of one variable.</param>
/// <param name="value">Receives the values; of the same length as <paramref name="x"/>. May not overlap the inputs unless it is the same span.</param>
public delegate void BatchFunction(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value);
