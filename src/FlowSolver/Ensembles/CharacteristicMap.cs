using System.Runtime.CompilerServices;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The map that carries each point along ẋ = −∇V for a time t, for many points at once: the gradient flow itself, without a step's error.
/// </summary>
/// <remarks>
/// <para>V quadratic (1-D), or |x − c|: closed form. Otherwise the Runge-Kutta method of order 5 of J. R. Dormand, P. J. Prince,
/// J. Comput. Appl. Math. 6 (1980) 19-26, with equal substeps. Their number is found once for each t by trying it on a lattice over the domain until
/// twice as many change no coordinate by more than <see cref="Tolerance"/>·scale, scale the domain's size. It is the same for
/// all points, so that where a point goes does not depend on who travels with it.</para>
/// <para>A kink where V has a valley (|x|) holds whoever reaches it, as the flow does; so does a wall that V pushes into. In two dimensions that is so for a
/// V that is a sum over the axes or depends on the distance from a point. A kink that the flow crosses leaves an error that falls only with the substep:
/// their number stops at <see cref="MostSubsteps"/> and <see cref="ErrorFor"/> says what is left.</para>
/// <para>Safe to use from several threads once <see cref="Prepare"/> has been called for a time; allocates nothing but there.</para>
/// </remarks>
public sealed class CharacteristicMap
{
    /// <summary>Promise on the estimated error over the whole time, relative to the domain's size.</summary>
    public const double Tolerance = 1e-10;

    /// <summary>No more substeps than this are taken.</summary>
    public const int MostSubsteps = 256;

    private const int Chunk = 128;
    private const int Stages = 6;
    private readonly Potential potential;
    private readonly Interval axisX;
    private readonly Interval? axisY;
    private readonly double[] valleys;
    private readonly double scale;
    private readonly PotentialForm? closedForm;
    private readonly Domain domain;
    private readonly PlaneStructure? structure;
    private readonly CharacteristicMap? alongFirst;
    private readonly CharacteristicMap? alongSecond;
    private (double Time, int Substeps, double Error) prepared = (double.NaN, 1, 0);

    /// <summary>Looks at a potential on a domain.</summary>
    /// <exception cref="ArgumentException">The dimensions disagree.</exception>
    public CharacteristicMap(Potential potential, Domain domain)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        Require.That(potential.Dimension == domain.Dimension,
            $"The potential has {potential.Dimension} variable(s) and the domain {domain.Dimension} axis/axes; they must agree.");
        this.potential = potential;
        this.domain = domain;
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
        structure = PlaneStructure.Find(potential, domain);
        if (structure is null)
            return;
        alongFirst = new CharacteristicMap(structure.First, new Domain(structure.IsRadial ? new Interval(0, structure.Reach) : axisX));
        alongSecond = structure.Second is { } second ? new CharacteristicMap(second, new Domain(axisY!)) : null;
    }

    /// <summary>Chooses the number of substeps for a time; to be called before <see cref="Apply"/>, from one thread.</summary>
    /// <param name="t">Mobility times time, above 0.</param>
    public void Prepare(double t)
    {
        Require.Positive(t);
        if (t == prepared.Time)
            return;
        if (structure is not null)
        {
            alongFirst!.Prepare(t);
            alongSecond?.Prepare(t);
            prepared = (t, 1, Math.Max(alongFirst.ErrorFor(t), alongSecond?.ErrorFor(t) ?? 0));
            return;
        }

        if (closedForm is not null)
        {
            prepared = (t, 1, 0);
            return;
        }

        var substeps = 1;
        var error = ErrorOnLattice(t, substeps);
        while (!(error <= Tolerance * scale) && substeps < MostSubsteps)
        {
            // The error falls like the number of substeps to the power −5; never more than fourfold at once.
            var wanted = double.IsFinite(error) ? 1.05 * Math.Pow(error / (Tolerance * scale), 0.2) : 4;
            substeps = Math.Min(MostSubsteps, (int)Math.Ceiling(substeps * Math.Clamp(wanted, 1.1, 4)));
            error = ErrorOnLattice(t, substeps);
        }

        prepared = (t, substeps, error);
    }

    /// <summary>Estimated error of the map prepared for a time, in units of length; at most <see cref="Tolerance"/> times the domain's size where V is smooth.</summary>
    public double ErrorFor(double t)
    {
        Prepare(t);
        return prepared.Error;
    }

    // Largest difference between the results of so many substeps and of twice as many.
    private double ErrorOnLattice(double t, int substeps)
    {
        var columns = axisY is null ? 1024 : 48;
        var rows = axisY is null ? 1 : 48;
        double[] x = new double[columns], u = new double[columns], otherU = new double[columns];
        var y = new double[axisY is null ? 0 : columns];
        double[] v = new double[y.Length], otherV = new double[y.Length];
        for (var i = 0; i < columns; i++)
            x[i] = axisX.From + (i + 0.5) / columns * axisX.Length;
        var worst = 0.0;
        for (var row = 0; row < rows; row++)
        {
            if (axisY is not null)
                Array.Fill(y, axisY.From + (row + 0.5) / rows * axisY.Length);
            IntegrateAll(t, substeps, x, y, u, v);
            IntegrateAll(t, 2 * substeps, x, y, otherU, otherV);
            for (var i = 0; i < columns; i++)
                worst = Math.Max(worst, Math.Max(Apart(axisX, u[i], otherU[i]), axisY is null ? 0 : Apart(axisY, v[i], otherV[i])));
        }

        return worst;
    }

    private static double Apart(Interval axis, double a, double b)
    {
        var distance = Math.Abs(a - b);
        return axis.Ends == AxisEnds.Periodic ? Math.Min(distance, axis.Length - distance) : distance;
    }

    private int IntegrateAll(double t, int substeps, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        var lost = 0;
        for (var first = 0; first < x.Length; first += Chunk)
        {
            var count = Math.Min(Chunk, x.Length - first);
            var partY = axisY is null ? [] : y.Slice(first, count);
            var destinationY = axisY is null ? [] : targetY.Slice(first, count);
            lost += Integrate(t, substeps, x.Slice(first, count), partY, targetX.Slice(first, count), destinationY);
        }

        return lost;
    }

    /// <summary>Writes the point that each point is carried to.</summary>
    /// <param name="t">Mobility times time, above 0.</param>
    /// <param name="x">First coordinates, inside the domain.</param>
    /// <param name="y">Second coordinates; empty in one dimension.</param>
    /// <param name="targetX">Receives first coordinates; may be <paramref name="x"/> itself.</param>
    /// <param name="targetY">Receives second coordinates; may be <paramref name="y"/> itself.</param>
    /// <returns>Number of points whose way was not finite: they stay where they were.</returns>
    /// <exception cref="ArgumentException">The lengths differ, or the map was not prepared for this time.</exception>
    public int Apply(double t, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        Require.Positive(t);
        Require.Length(targetX.Length, x.Length);
        Require.Length(y.Length, axisY is null ? 0 : x.Length);
        Require.Length(targetY.Length, y.Length);
        if (axisY is null && ApplyForm(t, x, targetX))
            return 0;
        Require.That(t == prepared.Time, "The map was used for a time that it was not prepared for; call Prepare first.");
        if (structure is not null)
            return structure.Apply(new LineMap(alongFirst!, t), alongSecond is null ? null : new LineMap(alongSecond, t), x, y, targetX, targetY, domain);
        return IntegrateAll(t, prepared.Substeps, x, y, targetX, targetY);
    }

    private readonly record struct LineMap(CharacteristicMap Map, double Time) : PlaneStructure.ILineMap
    {
        public int Apply(ReadOnlySpan<double> x, Span<double> target) => Map.Apply(Time, x, [], target, []);
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

    // Returns the number of points whose way was not finite.
    [SkipLocalsInit]
    private int Integrate(double t, int substeps, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        const int length = (4 + Stages) * 2 * Chunk;
        var storage = AlignedScratch.Of(stackalloc double[length + AlignedScratch.Slack], length);
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
        var step = t / substeps;
        for (var k = 0; k < substeps; k++)
        {
            Slope(states, states, evaluated, wrapped, Part(slopes, 0), n, axes);
            for (var stage = 1; stage <= Stages; stage++)
            {
                Combine(states, trials, slopes, Weights(stage), step, n, axes);
                if (stage < Stages)
                    Slope(states, trials, evaluated, wrapped, Part(slopes, stage), n, axes);
            }

            Arrive(states, trials, n, axes);
        }

        var lost = 0;
        for (var i = 0; i < x.Length; i++)
        {
            var finite = double.IsFinite(states[i]) && (axes == 1 || double.IsFinite(states[Chunk + i]));
            lost += finite ? 0 : 1;
            targetX[i] = finite ? axisX.Fold(states[i]) : x[i];
            if (axes == 2)
                targetY[i] = finite ? axisY!.Fold(states[Chunk + i]) : y[i];
        }

        return lost;
    }

    private static void Pad(ReadOnlySpan<double> x, Span<double> target)
    {
        x.CopyTo(target);
        target[x.Length..].Fill(x[^1]);
    }

    private static Span<double> Part(Span<double> slopes, int stage) => slopes.Slice(2 * Chunk * stage, 2 * Chunk);

    // Rows of the tableau; the sixth row is the result.
    private static ReadOnlySpan<double> Weights(int stage) => stage switch
    {
        1 => [1.0 / 5],
        2 => [3.0 / 40, 9.0 / 40],
        3 => [44.0 / 45, -56.0 / 15, 32.0 / 9],
        4 => [19372.0 / 6561, -25360.0 / 2187, 64448.0 / 6561, -212.0 / 729],
        5 => [9017.0 / 3168, -355.0 / 33, 46732.0 / 5247, 49.0 / 176, -5103.0 / 18656],
        _ => [35.0 / 384, 0, 500.0 / 1113, 125.0 / 192, -2187.0 / 6784, 11.0 / 84],
    };

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
