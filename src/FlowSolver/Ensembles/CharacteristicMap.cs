using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The map that carries each point along ẋ = −∇V for a time t, for many points at once: the gradient flow itself, without a step's error.
/// </summary>
/// <remarks>
/// <para>V quadratic (1-D), or |x − c|: closed form. Otherwise the Runge-Kutta method of order 5 of J. R. Dormand, P. J. Prince,
/// J. Comput. Appl. Math. 6 (1980) 19-26, with equal substeps. Their number, a power of two, is found once for each t and each cell of a lattice over the
/// domain: twice as many change no coordinate of the cell's corners and middles by more than <see cref="Tolerance"/>·scale, scale the domain's size. It
/// depends on the place alone, so that where a point goes does not depend on who travels with it.</para>
/// <para>A kink where V has a valley (|x|) holds whoever reaches it, as the flow does; so does a wall that V pushes into. In two dimensions that is so for a
/// V that is a sum over the axes or depends on the distance from a point. A kink that the flow crosses leaves an error that falls only with the substep:
/// their number stops at <see cref="MostSubsteps"/> and <see cref="ErrorFor"/> says what is left.</para>
/// <para>Safe to use from several threads once <see cref="Prepare"/> has been called for a time; allocates nothing but there.</para>
/// </remarks>
public sealed class CharacteristicMap
{
    /// <summary>Promise on the estimated error over the whole time, relative to the domain's size.</summary>
    public const double Tolerance = 1e-8;

    /// <summary>No more substeps than this are taken.</summary>
    public const int MostSubsteps = 1 << MostLevel;

    private const int Chunk = 256;
    private const int Columns1 = 1024;
    private const int Columns2 = 48;
    private const int MostLevel = 8;
    private const int Stages = 6;
    private const int MostTogether = 64;
    private readonly Potential potential;
    private readonly Interval axisX;
    private readonly Interval? axisY;
    private readonly double[] valleys;
    private readonly double scale;
    private readonly double stiffness;
    private readonly PotentialForm? closedForm;
    private readonly Domain domain;
    private readonly PlaneStructure? structure;
    private readonly CharacteristicMap? alongFirst;
    private readonly CharacteristicMap? alongSecond;
    private double preparedTime = double.NaN;
    private double preparedError;
    private byte[] levels = [];
    private double easyFrom;
    private double easyTo;

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
        {
            var survey = CurvatureSurvey.Of(potential, domain);
            stiffness = Math.Max(Math.Abs(survey.Least), Math.Abs(survey.Largest));
            return;
        }

        alongFirst = new CharacteristicMap(structure.First, new Domain(structure.IsRadial ? new Interval(0, structure.Reach) : axisX));
        alongSecond = structure.Second is { } second ? new CharacteristicMap(second, new Domain(axisY!)) : null;
    }

    /// <summary>Chooses the number of substeps for a time; to be called before <see cref="Apply"/>, from one thread.</summary>
    /// <param name="t">Mobility times time, above 0.</param>
    public void Prepare(double t)
    {
        Require.Positive(t);
        if (t == preparedTime)
            return;
        preparedTime = t;
        if (structure is not null)
        {
            alongFirst!.Prepare(t);
            alongSecond?.Prepare(t);
            preparedError = Math.Max(alongFirst.preparedError, alongSecond?.preparedError ?? 0);
            return;
        }

        preparedError = 0;
        if (closedForm is null)
            FindLevels(t);
    }

    /// <summary>Estimated error of the map prepared for a time, in units of length; at most <see cref="Tolerance"/> times the domain's size where V is smooth.</summary>
    public double ErrorFor(double t)
    {
        Prepare(t);
        return preparedError;
    }

    private int Columns => axisY is null ? Columns1 : Columns2;

    private int Rows => axisY is null ? 1 : Columns2;

    // Tries numbers of substeps on the corners and middles of the lattice's cells. Walls stop whoever overshoots, so that two coarse trials may agree in
    // a wrong answer: the reference is sought among substeps that are short against the curvature, and a level must agree with it together with all finer ones.
    private void FindLevels(double t)
    {
        var pointsX = 2 * Columns + 1;
        var pointsY = axisY is null ? 1 : 2 * Rows + 1;
        var x = new double[pointsX * pointsY];
        var y = new double[axisY is null ? 0 : x.Length];
        for (var i = 0; i < x.Length; i++)
        {
            x[i] = axisX.From + (i % pointsX) * axisX.Length / (pointsX - 1);
            if (axisY is not null)
                y[i] = axisY.From + (i / pointsX) * axisY.Length / (pointsY - 1);
        }

        var allowed = Tolerance * scale;
        var stable = (int)Math.Clamp(Math.Ceiling(Math.Log2(Math.Max(1, 2 * t * stiffness))), 0, MostLevel);
        var trials = new List<(double[] X, double[] Y)>();
        var lastChange = double.PositiveInfinity;
        for (var level = 0; level <= MostLevel + 1 && (level <= stable || lastChange > allowed); level++)
        {
            trials.Add(Trial(t, level, x, y));
            if (level == 0)
                continue;
            lastChange = 0;
            for (var i = 0; i < x.Length; i++)
                lastChange = Math.Max(lastChange, Apart(trials[level], trials[level - 1], i));
        }

        preparedError = Math.Max(allowed, lastChange);
        var needed = new byte[x.Length];
        var reference = trials[^1];
        for (var i = 0; i < x.Length; i++)
        {
            var level = trials.Count - 1;
            while (level > 0 && Apart(trials[level - 1], reference, i) <= allowed)
                level--;
            needed[i] = (byte)Math.Min(level, MostLevel);
        }

        levels = new byte[Columns * Rows];
        for (var row = 0; row < Rows; row++)
        {
            for (var column = 0; column < Columns; column++)
            {
                byte most = 0;
                for (var b = 0; b <= (axisY is null ? 0 : 2); b++)
                {
                    for (var a = 0; a <= 2; a++)
                        most = Math.Max(most, needed[(2 * row + b) * pointsX + 2 * column + a]);
                }

                levels[row * Columns + column] = most;
            }
        }

        (easyFrom, easyTo) = axisY is null ? LongestEasyStretch() : (double.PositiveInfinity, double.NegativeInfinity);
    }

    // Where one substep does: a chunk that lies inside need not look up its cells.
    private (double From, double To) LongestEasyStretch()
    {
        int bestFrom = 0, bestCount = 0, from = 0;
        for (var i = 0; i <= levels.Length; i++)
        {
            if (i < levels.Length && levels[i] == 0)
                continue;
            if (i - from > bestCount)
                (bestFrom, bestCount) = (from, i - from);
            from = i + 1;
        }

        var width = axisX.Length / Columns;
        return bestCount == 0
            ? (double.PositiveInfinity, double.NegativeInfinity)
            : (axisX.From + (bestFrom == 0 ? -1 : bestFrom) * width, axisX.From + (bestFrom + bestCount + (bestFrom + bestCount == Columns ? 1 : 0)) * width);
    }

    private (double[] X, double[] Y) Trial(double t, int level, double[] x, double[] y)
    {
        double[] u = new double[x.Length], v = new double[y.Length];
        for (var first = 0; first < x.Length; first += Chunk)
        {
            var count = Math.Min(Chunk, x.Length - first);
            var partY = axisY is null ? [] : y.AsSpan(first, count);
            Integrate(t, level, x.AsSpan(first, count), partY, u.AsSpan(first, count), axisY is null ? [] : v.AsSpan(first, count));
        }

        return (u, v);
    }

    private double Apart((double[] X, double[] Y) one, (double[] X, double[] Y) other, int point)
        => Math.Max(Apart(axisX, one.X[point], other.X[point]), axisY is null ? 0 : Apart(axisY, one.Y[point], other.Y[point]));

    private static double Apart(Interval axis, double a, double b)
    {
        var distance = Math.Abs(a - b);
        return axis.Ends == AxisEnds.Periodic ? Math.Min(distance, axis.Length - distance) : distance;
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
        Require.That(t == preparedTime, "The map was used for a time that it was not prepared for; call Prepare first.");
        if (structure is not null)
            return structure.Apply(new LineMap(alongFirst!, t), alongSecond is null ? null : new LineMap(alongSecond, t), x, y, targetX, targetY, domain);
        var lost = 0;
        for (var first = 0; first < x.Length; first += Chunk)
        {
            var count = Math.Min(Chunk, x.Length - first);
            var partY = axisY is null ? [] : y.Slice(first, count);
            lost += Integrate(t, -1, x.Slice(first, count), partY, targetX.Slice(first, count), axisY is null ? [] : targetY.Slice(first, count));
        }

        return lost;
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

    // Returns the number of points whose way was not finite. Level −1 looks up each point's own.
    [SkipLocalsInit]
    private int Integrate(double t, int level, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        const int length = (4 + Stages) * 2 * Chunk + Chunk;
        var storage = AlignedScratch.Of(stackalloc double[length + AlignedScratch.Slack], length);
        var axes = axisY is null ? 1 : 2;
        // Padded to whole vectors with copies of the last point.
        var n = (x.Length + 7) & ~7;
        var states = storage[..(2 * Chunk)];
        var trials = storage.Slice(2 * Chunk, 2 * Chunk);
        var evaluated = storage.Slice(4 * Chunk, 2 * Chunk);
        var steps = storage.Slice(6 * Chunk, n);
        var slopes = storage[(7 * Chunk)..];
        Pad(x, states[..n]);
        if (axes == 2)
            Pad(y, states.Slice(Chunk, n));
        Span<byte> own = stackalloc byte[Chunk];
        Span<byte> hard = stackalloc byte[Chunk];
        var hardCount = 0;
        if (level >= 0)
            own[..n].Fill((byte)level);
        else if (!IsEasy(states[..n], axes))
            hardCount = LookUp(states, own[..n], hard);
        // When few need more than one substep they travel again by themselves afterwards; what they do here is thrown away.
        var apart = level < 0 && hardCount > 0 && hardCount <= n / 2 && x.Length > MostTogether;
        var most = level >= 0 ? level : hardCount == 0 || apart ? 0 : MaxOf(own[..n]);
        for (var k = 0; k < 1 << most; k++)
        {
            // Whoever has made his substeps rests: a step of length 0 leaves a point where it is, to the bit.
            if (most == 0)
                steps.Fill(-t);
            else
                SetSteps(steps, own, t, k);
            Slope(states, states, evaluated, Part(slopes, 0), n, axes);
            Combine<Stage1>(states, trials, slopes, steps, n, axes);
            Slope(states, trials, evaluated, Part(slopes, 1), n, axes);
            Combine<Stage2>(states, trials, slopes, steps, n, axes);
            Slope(states, trials, evaluated, Part(slopes, 2), n, axes);
            Combine<Stage3>(states, trials, slopes, steps, n, axes);
            Slope(states, trials, evaluated, Part(slopes, 3), n, axes);
            Combine<Stage4>(states, trials, slopes, steps, n, axes);
            Slope(states, trials, evaluated, Part(slopes, 4), n, axes);
            Combine<Stage5>(states, trials, slopes, steps, n, axes);
            Slope(states, trials, evaluated, Part(slopes, 5), n, axes);
            Combine<Result>(states, trials, slopes, steps, n, axes);
            Arrive(states, trials, n, axes);
        }

        if (apart)
            TravelApart(t, x, y, states, hard[..hardCount], axes);
        var lost = 0;
        if (axes == 1 && IsFinite(states[..n]))
        {
            if (axisX.Ends == AxisEnds.Periodic)
                new AxisFold(axisX).FoldInPlace(states[..n]);
            states[..x.Length].CopyTo(targetX);
            return 0;
        }

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

    private static bool IsFinite(ReadOnlySpan<double> values)
    {
        ref var source = ref MemoryMarshal.GetReference(values);
        var difference = Vector512<double>.Zero;
        for (nuint i = 0; i < (nuint)values.Length; i += 8)
        {
            // x − x is 0 for a number and not a number for anything else.
            var value = Vector512.LoadUnsafe(ref source, i);
            difference += value - value;
        }

        return Vector512.EqualsAll(difference, Vector512<double>.Zero);
    }

    private static void SetSteps(Span<double> steps, ReadOnlySpan<byte> own, double t, int substep)
    {
        for (var i = 0; i < steps.Length; i++)
            steps[i] = substep < 1 << own[i] ? -t / (1 << own[i]) : 0;
    }

    private static int MaxOf(ReadOnlySpan<byte> values)
    {
        var most = 0;
        foreach (var value in values)
            most = Math.Max(most, value);
        return most;
    }

    // The level of each point, and who needs more than one substep; returns their number.
    private int LookUp(Span<double> states, Span<byte> own, Span<byte> hard)
    {
        var count = 0;
        var perX = Columns / axisX.Length;
        var perY = axisY is null ? 0 : Rows / axisY.Length;
        for (var i = 0; i < own.Length; i++)
        {
            var column = Math.Clamp((int)((states[i] - axisX.From) * perX), 0, Columns - 1);
            var row = axisY is null ? 0 : Math.Clamp((int)((states[Chunk + i] - axisY.From) * perY), 0, Rows - 1);
            own[i] = levels[row * Columns + column];
            hard[count] = (byte)i;
            count += own[i] > 0 ? 1 : 0;
        }

        return count;
    }

    private void TravelApart(double t, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> states, ReadOnlySpan<byte> hard, int axes)
    {
        Span<double> fromX = stackalloc double[MostTogether];
        Span<double> fromY = stackalloc double[MostTogether];
        for (var first = 0; first < hard.Length; first += MostTogether)
        {
            var part = hard.Slice(first, Math.Min(MostTogether, hard.Length - first));
            for (var i = 0; i < part.Length; i++)
            {
                // Padding repeats the last point.
                var from = Math.Min(part[i], x.Length - 1);
                fromX[i] = x[from];
                fromY[i] = axes == 2 ? y[from] : 0;
            }

            Integrate(t, -1, fromX[..part.Length], axes == 2 ? fromY[..part.Length] : [], fromX[..part.Length], axes == 2 ? fromY[..part.Length] : []);
            for (var i = 0; i < part.Length; i++)
            {
                states[part[i]] = fromX[i];
                if (axes == 2)
                    states[Chunk + part[i]] = fromY[i];
            }
        }
    }

    private bool IsEasy(ReadOnlySpan<double> x, int axes)
    {
        if (axes == 2)
            return false;
        ref var source = ref MemoryMarshal.GetReference(x);
        var outside = Vector512<long>.Zero;
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var position = Vector512.LoadUnsafe(ref source, i);
            outside |= (Vector512.LessThan(position, Vector512.Create(easyFrom)) | Vector512.GreaterThan(position, Vector512.Create(easyTo))).AsInt64();
        }

        return Vector512.EqualsAll(outside, Vector512<long>.Zero);
    }

    private static void Pad(ReadOnlySpan<double> x, Span<double> target)
    {
        x.CopyTo(target);
        target[x.Length..].Fill(x[^1]);
    }

    private static Span<double> Part(Span<double> slopes, int stage) => slopes.Slice(2 * Chunk * stage, 2 * Chunk);

    // A row of the tableau: Σ weight·slope. Each is a type of its own, so that the loop over points is compiled with the weights in it.
    private interface ITableauRow
    {
        static abstract Vector512<double> Sum(ref double slopes, nuint place);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> Add(Vector512<double> sum, double weight, ref double slopes, nuint place, int stage)
        => Vector512.FusedMultiplyAdd(Vector512.Create(weight), Vector512.LoadUnsafe(ref slopes, place + (nuint)(2 * Chunk * stage)), sum);

    private readonly struct Stage1 : ITableauRow
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Sum(ref double slopes, nuint place) => Vector512.Create(1.0 / 5) * Vector512.LoadUnsafe(ref slopes, place);
    }

    private readonly struct Stage2 : ITableauRow
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Sum(ref double slopes, nuint place)
        {
            var sum = Vector512.Create(3.0 / 40) * Vector512.LoadUnsafe(ref slopes, place);
            return Add(sum, 9.0 / 40, ref slopes, place, 1);
        }
    }

    private readonly struct Stage3 : ITableauRow
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Sum(ref double slopes, nuint place)
        {
            var sum = Vector512.Create(44.0 / 45) * Vector512.LoadUnsafe(ref slopes, place);
            sum = Add(sum, -56.0 / 15, ref slopes, place, 1);
            return Add(sum, 32.0 / 9, ref slopes, place, 2);
        }
    }

    private readonly struct Stage4 : ITableauRow
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Sum(ref double slopes, nuint place)
        {
            var sum = Vector512.Create(19372.0 / 6561) * Vector512.LoadUnsafe(ref slopes, place);
            sum = Add(sum, -25360.0 / 2187, ref slopes, place, 1);
            sum = Add(sum, 64448.0 / 6561, ref slopes, place, 2);
            return Add(sum, -212.0 / 729, ref slopes, place, 3);
        }
    }

    private readonly struct Stage5 : ITableauRow
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Sum(ref double slopes, nuint place)
        {
            var sum = Vector512.Create(9017.0 / 3168) * Vector512.LoadUnsafe(ref slopes, place);
            sum = Add(sum, -355.0 / 33, ref slopes, place, 1);
            sum = Add(sum, 46732.0 / 5247, ref slopes, place, 2);
            sum = Add(sum, 49.0 / 176, ref slopes, place, 3);
            return Add(sum, -5103.0 / 18656, ref slopes, place, 4);
        }
    }

    private readonly struct Result : ITableauRow
    {
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public static Vector512<double> Sum(ref double slopes, nuint place)
        {
            var sum = Vector512.Create(35.0 / 384) * Vector512.LoadUnsafe(ref slopes, place);
            sum = Add(sum, 500.0 / 1113, ref slopes, place, 2);
            sum = Add(sum, 125.0 / 192, ref slopes, place, 3);
            sum = Add(sum, -2187.0 / 6784, ref slopes, place, 4);
            return Add(sum, 11.0 / 84, ref slopes, place, 5);
        }
    }

    // Slopes at points reached from states. A point beyond a valley of V is looked at just before it, so that the integrator sees a smooth
    // slope up to the moment of arrival; a state in the valley rests. Beyond a wall V need not be defined: the wall itself is looked at.
    private void Slope(Span<double> states, Span<double> points, Span<double> evaluated, Span<double> slope, int n, int axes)
    {
        for (var axis = 0; axis < axes; axis++)
        {
            var interval = axis == 0 ? axisX : axisY!;
            var source = points.Slice(axis * Chunk, n);
            var target = evaluated.Slice(axis * Chunk, n);
            if (axes == 1 && valleys.Length > 0)
            {
                source.CopyTo(target);
                source = target;
                foreach (var valley in valleys)
                {
                    for (var i = 0; i < n; i++)
                    {
                        if (states[i] < valley && target[i] >= valley)
                            target[i] = Math.BitDecrement(valley);
                        else if (states[i] > valley && target[i] <= valley)
                            target[i] = Math.BitIncrement(valley);
                    }
                }
            }

            if (interval.Ends == AxisEnds.Periodic)
                new AxisFold(interval).Fold(source, target);
            else
                Hold(interval, source, target);
        }

        if (axes == 1)
            potential.Gradient(evaluated[..n], [], slope[..n], []);
        else
            potential.Gradient(evaluated[..n], evaluated.Slice(Chunk, n), slope[..n], slope.Slice(Chunk, n));
        foreach (var valley in axes == 1 ? valleys : [])
        {
            for (var i = 0; i < n; i++)
            {
                if (states[i] == valley)
                    slope[i] = 0;
            }
        }
    }

    // Not-a-number passes through.
    private static void Hold(Interval interval, ReadOnlySpan<double> x, Span<double> target)
    {
        ref var source = ref MemoryMarshal.GetReference(x);
        ref var destination = ref MemoryMarshal.GetReference(target);
        var from = Vector512.Create(interval.From);
        var to = Vector512.Create(interval.To);
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var position = Vector512.LoadUnsafe(ref source, i);
            position = Vector512.ConditionalSelect(Vector512.LessThan(position, from), from, position);
            Vector512.ConditionalSelect(Vector512.GreaterThan(position, to), to, position).StoreUnsafe(ref destination, i);
        }
    }

    // trial = state + step·Σ weight·slope; steps carry the sign of −∇V.
    private static void Combine<TRow>(Span<double> states, Span<double> trials, Span<double> slopes, ReadOnlySpan<double> steps, int n, int axes)
        where TRow : struct, ITableauRow
    {
        ref var step = ref MemoryMarshal.GetReference(steps);
        for (var axis = 0; axis < axes; axis++)
        {
            ref var state = ref MemoryMarshal.GetReference(states[(axis * Chunk)..]);
            ref var trial = ref MemoryMarshal.GetReference(trials[(axis * Chunk)..]);
            ref var slope = ref MemoryMarshal.GetReference(slopes[(axis * Chunk)..]);
            for (nuint i = 0; i < (nuint)n; i += 8)
                Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref step, i), TRow.Sum(ref slope, i), Vector512.LoadUnsafe(ref state, i)).StoreUnsafe(ref trial, i);
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
                source.CopyTo(target);
            else
                Hold(interval, source, target);
        }
    }
}
