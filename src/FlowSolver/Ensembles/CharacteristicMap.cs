using System.Runtime.CompilerServices;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The map that carries each point along ẋ = −∇V for a time t, for many points at once: the gradient flow itself, without a step's error.
/// </summary>
/// <remarks>
/// <para>V quadratic (1-D), or |x − c|: closed form. Otherwise the embedded Runge-Kutta pair of orders 5 and 4 of J. R. Dormand, P. J. Prince,
/// J. Comput. Appl. Math. 6 (1980) 19-26, with one step length for up to 128 points, so that the estimated error of a step, as a share of t and in
/// each coordinate, stays below <see cref="Tolerance"/>·scale, scale the domain's size.</para>
/// <para>A kink where V has a valley (|x|) holds whoever reaches it, as the flow does; so does a wall that V pushes into. A kink that the flow
/// crosses costs short steps around it.</para>
/// <para>Immutable, safe to use from several threads, allocates nothing after construction.</para>
/// </remarks>
public sealed class CharacteristicMap
{
    /// <summary>Promise on the estimated error over the whole time, relative to the domain's size.</summary>
    public const double Tolerance = 1e-10;

    private const int Chunk = 128;
    private const int MostSteps = 2000;
    private const int Stages = 6;
    private readonly Potential potential;
    private readonly Interval axisX;
    private readonly Interval? axisY;
    private readonly double[] valleys;
    private readonly double scale;
    private readonly PotentialForm? closedForm;

    /// <summary>Looks at a potential on a domain.</summary>
    /// <exception cref="ArgumentException">The dimensions disagree.</exception>
    public CharacteristicMap(Potential potential, Domain domain)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        Require.That(potential.Dimension == domain.Dimension,
            $"The potential has {potential.Dimension} variable(s) and the domain {domain.Dimension} axis/axes; they must agree.");
        this.potential = potential;
        axisX = domain.X;
        axisY = domain.Y;
        scale = Math.Max(axisX.Length, axisY?.Length ?? 0);
        closedForm = axisY is null ? ClosedForms.Usable(potential, axisX) : null;
        var found = new List<double>();
        if (axisY is null)
        {
            foreach (var kink in potential.FindKinks(axisX))
            {
                if (kink.SlopeBefore < 0 && kink.SlopeAfter > 0)
                    found.Add(kink.Position);
            }
        }

        if (axisX.Ends == AxisEnds.Periodic && axisY is null)
        {
            if (ProximalMap.Seam(potential, axisX) is { SlopeBefore: < 0, SlopeAfter: > 0 })
                found.Add(axisX.From);
            foreach (var valley in found.ToArray())
                found.AddRange([valley - axisX.Length, valley + axisX.Length]);
        }

        valleys = [.. found];
    }

    /// <summary>Writes the point that each point is carried to.</summary>
    /// <param name="t">Mobility times time, above 0.</param>
    /// <param name="x">First coordinates, inside the domain.</param>
    /// <param name="y">Second coordinates; empty in one dimension.</param>
    /// <param name="targetX">Receives first coordinates; may be <paramref name="x"/> itself.</param>
    /// <param name="targetY">Receives second coordinates; may be <paramref name="y"/> itself.</param>
    /// <returns>Number of points where the tolerance was not reached: there the best point found is written.</returns>
    /// <exception cref="ArgumentException">The lengths differ.</exception>
    public int Apply(double t, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        Require.Positive(t);
        Require.Length(targetX.Length, x.Length);
        Require.Length(y.Length, axisY is null ? 0 : x.Length);
        Require.Length(targetY.Length, y.Length);
        if (axisY is null && ApplyForm(t, x, targetX))
            return 0;
        var missed = 0;
        for (var first = 0; first < x.Length; first += Chunk)
        {
            var count = Math.Min(Chunk, x.Length - first);
            missed += Integrate(
                t, x.Slice(first, count), axisY is null ? [] : y.Slice(first, count), targetX.Slice(first, count), axisY is null ? [] : targetY.Slice(first, count));
        }

        return missed;
    }

    private bool ApplyForm(double t, ReadOnlySpan<double> x, Span<double> target)
    {
        switch (closedForm)
        {
            case QuadraticForm form:
                var decay = Math.Exp(-form.HessianXX * t);
                // (1 − e^(−Ht))/H tends to t.
                var reach = Math.Abs(form.HessianXX * t) < 1e-8 ? t : (1 - decay) / form.HessianXX;
                ClosedForms.Affine(axisX, x, decay, -reach * form.GradientX, target);
                return true;
            case AbsoluteValueForm form:
                ClosedForms.SoftThreshold(axisX, x, form.Center, t * form.Slope, target);
                return true;
            default:
                return false;
        }
    }

    [SkipLocalsInit]
    private int Integrate(double t, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        Span<double> storage = stackalloc double[(4 + Stages + 1) * 2 * Chunk];
        var axes = axisY is null ? 1 : 2;
        // Padded to whole vectors with copies of the last point.
        var n = (x.Length + 7) & ~7;
        var states = storage[..(2 * Chunk)];
        var trials = storage.Slice(2 * Chunk, 2 * Chunk);
        var evaluated = storage.Slice(4 * Chunk, 2 * Chunk);
        var wrapped = storage.Slice(6 * Chunk, 2 * Chunk);
        var slopes = storage[(8 * Chunk)..];
        Pad(x, states[..n]);
        if (axes == 2)
            Pad(y, states.Slice(Chunk, n));
        Slope(states, states, evaluated, wrapped, Part(slopes, 0), n, axes);
        var done = 0.0;
        var step = t;
        var unfinished = 0;
        for (var count = 0; done < t; count++)
        {
            if (count == MostSteps)
            {
                unfinished = x.Length;
                break;
            }

            step = Math.Min(step, t - done);
            for (var stage = 1; stage <= Stages; stage++)
            {
                Combine(states, trials, slopes, Weights(stage), step, n, axes);
                Slope(states, trials, evaluated, wrapped, Part(slopes, stage), n, axes);
            }

            // The seventh slope is that at the new point: it serves the error estimate and the next step.
            var error = ErrorOf(slopes, step, n, axes);
            var most = Tolerance * scale * (step / t);
            if (!(error <= most) && step > 1e-9 * t)
            {
                step *= double.IsFinite(error) ? Math.Clamp(0.9 * Math.Pow(most / error, 0.2), 0.1, 0.9) : 0.1;
                continue;
            }

            done = step >= t - done ? t : done + step;
            Arrive(states, trials, n, axes);
            if (valleys.Length > 0)
                Slope(states, states, evaluated, wrapped, Part(slopes, 0), n, axes);
            else
                Part(slopes, Stages).CopyTo(Part(slopes, 0));
            step *= Math.Clamp(0.9 * Math.Pow(most / Math.Max(error, 1e-300), 0.2), 0.5, 5);
        }

        for (var i = 0; i < x.Length; i++)
        {
            var finite = double.IsFinite(states[i]) && (axes == 1 || double.IsFinite(states[Chunk + i]));
            if (!finite)
                unfinished = Math.Min(unfinished + 1, x.Length);
            targetX[i] = finite ? axisX.Fold(states[i]) : x[i];
            if (axes == 2)
                targetY[i] = finite ? axisY!.Fold(states[Chunk + i]) : y[i];
        }

        return unfinished;
    }

    private static void Pad(ReadOnlySpan<double> x, Span<double> target)
    {
        x.CopyTo(target);
        target[x.Length..].Fill(x[^1]);
    }

    private static Span<double> Part(Span<double> slopes, int stage) => slopes.Slice(2 * Chunk * stage, 2 * Chunk);

    // The pair of Dormand and Prince: rows of the tableau; the sixth row is the fifth-order result itself.
    private static ReadOnlySpan<double> Weights(int stage) => stage switch
    {
        1 => [1.0 / 5],
        2 => [3.0 / 40, 9.0 / 40],
        3 => [44.0 / 45, -56.0 / 15, 32.0 / 9],
        4 => [19372.0 / 6561, -25360.0 / 2187, 64448.0 / 6561, -212.0 / 729],
        5 => [9017.0 / 3168, -355.0 / 33, 46732.0 / 5247, 49.0 / 176, -5103.0 / 18656],
        _ => [35.0 / 384, 0, 500.0 / 1113, 125.0 / 192, -2187.0 / 6784, 11.0 / 84],
    };

    private static ReadOnlySpan<double> ErrorWeights =>
        [71.0 / 57600, 0, -71.0 / 16695, 71.0 / 1920, -17253.0 / 339200, 22.0 / 525, -1.0 / 40];

    // Slopes at points reached from states. A point beyond a valley of V is looked at just before it, so that the integrator sees a smooth
    // slope up to the moment of arrival; a state in the valley rests. Beyond a wall V need not be defined: the wall itself is looked at.
    private void Slope(Span<double> states, Span<double> points, Span<double> evaluated, Span<double> wrapped, Span<double> slope, int n, int axes)
    {
        for (var axis = 0; axis < axes; axis++)
        {
            var interval = axis == 0 ? axisX : axisY!;
            var source = points.Slice(axis * Chunk, n);
            var target = evaluated.Slice(axis * Chunk, n);
            source.CopyTo(target);
            foreach (var valley in axes == 1 ? valleys : [])
            {
                for (var i = 0; i < n; i++)
                {
                    if (states[i] < valley && target[i] >= valley)
                        target[i] = Math.BitDecrement(valley);
                    else if (states[i] > valley && target[i] <= valley)
                        target[i] = Math.BitIncrement(valley);
                }
            }

            if (interval.Ends == AxisEnds.Periodic)
            {
                new AxisFold(interval).Fold(target, wrapped.Slice(axis * Chunk, n));
                continue;
            }

            var destination = wrapped.Slice(axis * Chunk, n);
            for (var i = 0; i < n; i++)
                destination[i] = target[i] < interval.From ? interval.From : target[i] > interval.To ? interval.To : target[i];
        }

        if (axes == 1)
            potential.Gradient(wrapped[..n], [], slope[..n], []);
        else
            potential.Gradient(wrapped[..n], wrapped.Slice(Chunk, n), slope[..n], slope.Slice(Chunk, n));
        foreach (var valley in axes == 1 ? valleys : [])
        {
            for (var i = 0; i < n; i++)
            {
                if (states[i] == valley)
                    slope[i] = 0;
            }
        }
    }

    private static void Combine(Span<double> states, Span<double> trials, Span<double> slopes, ReadOnlySpan<double> weights, double step, int n, int axes)
    {
        for (var axis = 0; axis < axes; axis++)
        {
            var target = trials.Slice(axis * Chunk, n);
            states.Slice(axis * Chunk, n).CopyTo(target);
            for (var k = 0; k < weights.Length; k++)
            {
                if (weights[k] != 0)
                    SpanKernels.AddScaled(target, -step * weights[k], Part(slopes, k).Slice(axis * Chunk, n));
            }
        }
    }

    private static double ErrorOf(Span<double> slopes, double step, int n, int axes)
    {
        Span<double> sum = stackalloc double[Chunk];
        var largest = 0.0;
        for (var axis = 0; axis < axes; axis++)
        {
            var part = sum[..n];
            part.Clear();
            for (var k = 0; k <= Stages; k++)
            {
                if (ErrorWeights[k] != 0)
                    SpanKernels.AddScaled(part, ErrorWeights[k], Part(slopes, k).Slice(axis * Chunk, n));
            }

            largest = Math.Max(largest, SpanKernels.MaxAbs(part));
        }

        return step * largest;
    }

    // Takes the new points, holds in a valley of V whoever has just crossed it, and stops at walls.
    private void Arrive(Span<double> states, Span<double> trials, int n, int axes)
    {
        foreach (var valley in valleys)
        {
            for (var i = 0; i < n; i++)
            {
                if ((states[i] - valley) * (trials[i] - valley) <= 0)
                    trials[i] = valley;
            }
        }

        for (var axis = 0; axis < axes; axis++)
        {
            var interval = axis == 0 ? axisX : axisY!;
            var source = trials.Slice(axis * Chunk, n);
            var target = states.Slice(axis * Chunk, n);
            if (interval.Ends == AxisEnds.Periodic)
            {
                source.CopyTo(target);
                continue;
            }

            for (var i = 0; i < n; i++)
                target[i] = source[i] < interval.From ? interval.From : source[i] > interval.To ? interval.To : source[i];
        }
    }
}
