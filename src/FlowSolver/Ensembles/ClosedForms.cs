using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>Proximal points and characteristics that need no iteration, in one dimension. What lies beyond a wall stops there.</summary>
internal static class ClosedForms
{
    /// <summary>
    /// The form when it can be used as it stands; null when a number is not finite (the iteration then finds and reports what is wrong) or when
    /// the ends of a circle meet in a valley, of which the form does not know.
    /// </summary>
    public static PotentialForm? Usable(Potential potential, Interval axis)
    {
        if (axis.Ends == AxisEnds.Periodic && ProximalMap.Seam(potential, axis) is { } seam && seam.SlopeBefore < seam.SlopeAfter)
            return null;
        return potential.Form switch
        {
            QuadraticForm quadratic when double.IsFinite(quadratic.GradientX) && double.IsFinite(quadratic.HessianXX) => quadratic,
            AbsoluteValueForm absolute when double.IsFinite(absolute.Slope) && double.IsFinite(absolute.Center) => absolute,
            _ => null,
        };
    }

    /// <summary>factor·x + shift.</summary>
    public static void Affine(Interval axis, ReadOnlySpan<double> x, double factor, double shift, Span<double> target)
    {
        var whole = x.Length - x.Length % 8;
        ref var source = ref MemoryMarshal.GetReference(x);
        ref var destination = ref MemoryMarshal.GetReference(target);
        var fold = new AxisFold(axis);
        for (nuint i = 0; i < (nuint)whole; i += 8)
        {
            var moved = Vector512.FusedMultiplyAdd(Vector512.Create(factor), Vector512.LoadUnsafe(ref source, i), Vector512.Create(shift));
            Settle(axis, fold, moved).StoreUnsafe(ref destination, i);
        }

        for (var i = whole; i < x.Length; i++)
            target[i] = Settle(axis, Math.FusedMultiplyAdd(factor, x[i], shift));
    }

    /// <summary>The point moved towards the centre by <paramref name="distance"/>, and no further than it.</summary>
    public static void SoftThreshold(Interval axis, ReadOnlySpan<double> x, double center, double distance, Span<double> target)
    {
        var whole = x.Length - x.Length % 8;
        ref var source = ref MemoryMarshal.GetReference(x);
        ref var destination = ref MemoryMarshal.GetReference(target);
        var fold = new AxisFold(axis);
        var middle = Vector512.Create(center);
        var reach = Vector512.Create(distance);
        for (nuint i = 0; i < (nuint)whole; i += 8)
        {
            var offset = Vector512.LoadUnsafe(ref source, i) - middle;
            var left = Vector512.ConditionalSelect(Vector512.LessThan(offset, -reach), offset + reach, Vector512<double>.Zero);
            var kept = Vector512.ConditionalSelect(Vector512.GreaterThan(offset, reach), offset - reach, left);
            Settle(axis, fold, middle + kept).StoreUnsafe(ref destination, i);
        }

        for (var i = whole; i < x.Length; i++)
        {
            var offset = x[i] - center;
            target[i] = Settle(axis, center + (offset > distance ? offset - distance : offset < -distance ? offset + distance : 0));
        }
    }

    private static Vector512<double> Settle(Interval axis, AxisFold fold, Vector512<double> position)
    {
        if (axis.Ends == AxisEnds.Periodic)
            return fold.Fold(position);
        position = Vector512.ConditionalSelect(Vector512.LessThan(position, Vector512.Create(axis.From)), Vector512.Create(axis.From), position);
        return Vector512.ConditionalSelect(Vector512.GreaterThan(position, Vector512.Create(axis.To)), Vector512.Create(axis.To), position);
    }

    private static double Settle(Interval axis, double position) => axis.Ends == AxisEnds.Periodic
        ? axis.Fold(position)
        : position < axis.From ? axis.From : position > axis.To ? axis.To : position;
}
