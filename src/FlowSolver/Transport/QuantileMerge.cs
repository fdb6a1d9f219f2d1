using System.Runtime.CompilerServices;
using FlowSolver.Foundation;

namespace FlowSolver.Transport;

/// <summary>A position as the near end of its piece plus the way from there, so that two close positions can be subtracted without loss.</summary>
internal readonly struct NearPosition(double end, double offset)
{
    public double Value => end + offset;

    /// <summary>this − other.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public double Minus(NearPosition other) => (end - other.End) + (offset - other.Offset);

    private double End => end;

    private double Offset => offset;
}

/// <summary>Receives the pieces of two merged quantile functions, on each of which both are linear.</summary>
internal interface IMergeSink
{
    /// <summary>A piece of the given mass, 0 or above, over which the first goes from a0 to a1 and the second from b0 to b1.</summary>
    void Piece(double mass, NearPosition a0, NearPosition a1, NearPosition b0, NearPosition b1);

    /// <summary>The first jumps at a place where the second has slope <paramref name="slopeB"/> (position a mass).</summary>
    void JumpOfFirst(double jump, double slopeB);

    /// <summary>The second jumps; <paramref name="difference"/> is first minus second half-way through the jump.</summary>
    void JumpOfSecond(double jump, double difference, double slopeA);
}

/// <summary>Σ ∫ (a − b)² du over the pieces.</summary>
internal struct CostSink : IMergeSink
{
    // Compensated (Neumaier): a million tiny pieces beside a few large ones.
    private double sum;
    private double rest;

    public readonly double Cost => sum + rest;

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public void Piece(double mass, NearPosition a0, NearPosition a1, NearPosition b0, NearPosition b1)
    {
        var first = a0.Minus(b0);
        var last = a1.Minus(b1);
        var term = mass * ((first * first + first * last) + last * last) / 3;
        var next = sum + term;
        rest += sum >= term ? (sum - next) + term : (term - next) + sum;
        sum = next;
    }

    public readonly void JumpOfFirst(double jump, double slopeB) { }

    public readonly void JumpOfSecond(double jump, double difference, double slopeA) { }
}

/// <summary>The cost and its derivatives with respect to the cut, the shift of the second law's mass coordinate.</summary>
internal struct CutSink : IMergeSink
{
    private CostSink cost;
    private double slope;
    private double curvature;

    public readonly double Cost => cost.Cost;

    /// <summary>d cost / d shift = 2 ∫ (a − b) db.</summary>
    public readonly double Derivative => 2 * slope;

    /// <summary>d² cost / d shift² = 2 ∫ a′ db; infinite where jumps of both meet.</summary>
    public readonly double SecondDerivative => 2 * curvature;

    public void Piece(double mass, NearPosition a0, NearPosition a1, NearPosition b0, NearPosition b1)
    {
        cost.Piece(mass, a0, a1, b0, b1);
        var rise = b1.Minus(b0);
        slope += rise * 0.5 * (a0.Minus(b0) + a1.Minus(b1));
        if (mass > QuantileMerge.LeastMass)
            curvature += a1.Minus(a0) * (rise / mass);
    }

    public void JumpOfFirst(double jump, double slopeB) => curvature += jump * slopeB;

    public void JumpOfSecond(double jump, double difference, double slopeA)
    {
        slope += jump * difference;
        curvature += jump * slopeA;
    }
}

/// <summary>Merges the breakpoints of two quantile functions over the mass interval [0, 1], in one pass.</summary>
internal static class QuantileMerge
{
    public const double LeastMass = 1e-60;

    /// <param name="a">The first law, on the piece that holds mass coordinate 0.</param>
    /// <param name="b">The second law, likewise.</param>
    /// <param name="sink">Receives the pieces.</param>
    /// <param name="circumference">Length of the circle; 0 on a line, which does not close.</param>
    public static void Walk<TFirst, TSecond, TSink>(ref TFirst a, ref TSecond b, ref TSink sink, double circumference = 0)
        where TFirst : IQuantileCursor, allows ref struct
        where TSecond : IQuantileCursor, allows ref struct
        where TSink : struct, IMergeSink
    {
        DoubleDouble mass = 0;
        DoubleDouble one = 1;
        var slopeA = Slope(a.Begin, a.End, a.From, a.To);
        var slopeB = Slope(b.Begin, b.End, b.From, b.To);
        var a0 = At(mass, a.Begin, a.End, a.From, a.To, slopeA);
        var b0 = At(mass, b.Begin, b.End, b.From, b.To, slopeB);

        var (startA, startB) = (a0, b0);
        while (true)
        {
            var firstEnds = !(b.End < a.End);
            var secondEnds = !(a.End < b.End);
            var next = firstEnds ? a.End : b.End;
            var a1 = firstEnds ? new NearPosition(a.To, 0) : At(next, a.Begin, a.End, a.From, a.To, slopeA);
            var b1 = secondEnds ? new NearPosition(b.To, 0) : At(next, b.Begin, b.End, b.From, b.To, slopeB);
            // A piece whose mass is lost in rounding still spans length, which the derivative of the cut needs.
            sink.Piece(Math.Max(DoubleDouble.Difference(next, mass), 0), a0, a1, b0, b1);
            mass = next;
            if (!(mass < one))
            {
                // On a circle the end is the start one turn on. What is missing to it holds no mass (gaps, and cells whose mass is lost in rounding).
                if (circumference > 0)
                {
                    var jumpA = startA.Minus(a1) + circumference;
                    var jumpB = startB.Minus(b1) + circumference;
                    sink.JumpOfFirst(jumpA, slopeB);
                    sink.JumpOfSecond(jumpB, a1.Minus(b1) + 0.5 * (jumpA - jumpB), slopeA);
                }

                return;
            }

            var jumpOfA = 0.0;
            if (firstEnds)
            {
                a.MoveNext();
                slopeA = Slope(a.Begin, a.End, a.From, a.To);
                a1 = new NearPosition(a.From, 0);
                jumpOfA = a.Jump;
                if (jumpOfA != 0)
                    sink.JumpOfFirst(jumpOfA, slopeB);
            }

            if (secondEnds)
            {
                b.MoveNext();
                slopeB = Slope(b.Begin, b.End, b.From, b.To);
                b1 = new NearPosition(b.From, 0);
                if (b.Jump != 0)
                    sink.JumpOfSecond(b.Jump, a1.Minus(b1) - 0.5 * (jumpOfA - b.Jump), slopeA);
            }

            a0 = a1;
            b0 = b1;
        }
    }

    // Below the least mass a slope would overflow, and no cost can be seen.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static double Slope(DoubleDouble begin, DoubleDouble end, double from, double to)
    {
        var mass = DoubleDouble.Difference(end, begin);
        return mass > LeastMass ? (to - from) / mass : 0;
    }

    // Measured from the nearer end: an offset of the size of a rounding error is then right to its own last digit.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static NearPosition At(DoubleDouble mass, DoubleDouble begin, DoubleDouble end, double from, double to, double slope)
    {
        var after = DoubleDouble.Difference(mass, begin);
        var before = DoubleDouble.Difference(end, mass);
        return after <= before ? new NearPosition(from, after * slope) : new NearPosition(to, -before * slope);
    }
}
