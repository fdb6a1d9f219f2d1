namespace FlowSolver.Problems;

/// <summary>Targets of <see cref="Potential.Jet"/>: spans of the same length as the points. In one dimension the y parts are empty.</summary>
public readonly ref struct PotentialJet
{
    /// <summary>V.</summary>
    public Span<double> Value { get; init; }

    /// <summary>∂V/∂x.</summary>
    public Span<double> GradientX { get; init; }

    /// <summary>∂V/∂y; empty in one dimension.</summary>
    public Span<double> GradientY { get; init; }

    /// <summary>∂²V/∂x².</summary>
    public Span<double> HessianXX { get; init; }

    /// <summary>∂²V/∂x∂y; empty in one dimension.</summary>
    public Span<double> HessianXY { get; init; }

    /// <summary>∂²V/∂y²; empty in one dimension.</summary>
    public Span<double> HessianYY { get; init; }
}

/// <summary>A point of a one-dimensional potential where the slope or the value jumps.</summary>
/// <param name="Position">Where, in units of length.</param>
/// <param name="SlopeBefore">V′ just below.</param>
/// <param name="SlopeAfter">V′ just above.</param>
/// <param name="Jump">V just above minus V just below; 0 for a kink proper.</param>
public readonly record struct Kink(double Position, double SlopeBefore, double SlopeAfter, double Jump);

/// <summary>A potential of known closed form; see the derived types.</summary>
public abstract record PotentialForm;

/// <summary>V = Constant + g·x + ½ xᵀHx, in one or two dimensions (the y parts are 0 in one).</summary>
public sealed record QuadraticForm(
    double Constant, double GradientX, double GradientY, double HessianXX, double HessianXY, double HessianYY) : PotentialForm;

/// <summary>V = Constant + Slope·|x − Center| in one dimension, Slope &gt; 0.</summary>
public sealed record AbsoluteValueForm(double Constant, double Slope, double Center) : PotentialForm;

/// <summary>
/// An energy landscape V on the line or the plane, with first and second derivatives, evaluated for many points at once.
/// </summary>
/// <remarks>
/// Immutable and safe to use from several threads. In one dimension every <c>y</c> span is empty. At a kink a derivative may be that of either
/// side. Values are in units of energy; where V overflows the result is ±∞ or NaN and the caller decides. No method allocates.
/// Derive from this type to use a landscape that no formula describes.
/// </remarks>
public abstract class Potential
{
    /// <summary>1 or 2.</summary>
    public abstract int Dimension { get; }

    /// <summary>How the potential is shown to a reader, such as its formula.</summary>
    public abstract string Description { get; }

    /// <summary>The closed form, where it is recognised; null otherwise.</summary>
    public virtual PotentialForm? Form => null;

    /// <summary>Whether V has kinks or jumps anywhere (known from its formula, not by sampling).</summary>
    public virtual bool IsSmooth => true;

    /// <summary>Writes V.</summary>
    public abstract void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value);

    /// <summary>Writes ∇V; <paramref name="gradientY"/> is empty in one dimension.</summary>
    public abstract void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY);

    /// <summary>Writes V, ∇V and D²V in one pass.</summary>
    public abstract void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target);

    /// <summary>Kinks and jumps inside an interval, in increasing order; one dimension only. Empty for a smooth potential.</summary>
    public virtual IReadOnlyList<Kink> FindKinks(Interval interval) => [];

    /// <summary>V at one point, for places where speed does not matter.</summary>
    public double ValueAt(double x, double y = 0)
    {
        Span<double> value = stackalloc double[1];
        Value([x], Dimension == 2 ? [y] : [], value);
        return value[0];
    }
}
