using FlowSolver.Foundation;

namespace FlowSolver.Problems;

/// <summary>What happens at the ends of an axis.</summary>
public enum AxisEnds
{
    /// <summary>Walls: no probability flows out; walkers are reflected.</summary>
    Reflecting,

    /// <summary>The two ends are the same point: the axis is a circle.</summary>
    Periodic,
}

/// <summary>One side of the domain, in units of length.</summary>
/// <param name="From">Lower end.</param>
/// <param name="To">Upper end, above <paramref name="From"/>.</param>
/// <param name="Ends">Walls or a circle.</param>
public sealed record Interval(double From, double To, AxisEnds Ends = AxisEnds.Reflecting)
{
    /// <summary>Lower end.</summary>
    public double From { get; } = Require.Finite(From);

    /// <summary>Upper end.</summary>
    public double To { get; } = Require.Finite(To) > From
        ? To
        : throw new ArgumentOutOfRangeException(nameof(To), $"To was {To}; it must be above From ({From}).");

    /// <summary>To − From.</summary>
    public double Length => To - From;

    /// <summary>Whether a point lies in the closed interval.</summary>
    public bool Contains(double position) => position >= From && position <= To;

    /// <summary>
    /// The point of the interval that a walker at <paramref name="position"/> is taken to be at: reflected at walls as often as needed,
    /// wrapped on a circle. NaN stays NaN.
    /// </summary>
    public double Fold(double position)
    {
        if (position >= From && position <= To)
            return position;
        if (Ends == AxisEnds.Periodic)
        {
            var turn = (position - From) / Length;
            var wrapped = From + (turn - Math.Floor(turn)) * Length;
            return wrapped < To ? wrapped : From;
        }

        var phase = (position - From) / (2 * Length);
        var inside = (phase - Math.Floor(phase)) * 2 * Length;
        return Math.Clamp(From + (inside <= Length ? inside : 2 * Length - inside), From, To);
    }
}

/// <summary>The domain: an interval or a rectangle.</summary>
/// <param name="X">First axis.</param>
/// <param name="Y">Second axis; null in one dimension.</param>
public sealed record Domain(Interval X, Interval? Y = null)
{
    /// <summary>1 or 2.</summary>
    public int Dimension => Y is null ? 1 : 2;
}
