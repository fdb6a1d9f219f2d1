using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// The proximal map prox_{tV}(x) = argmin_y |y − x|²/(2t) + V(y) over the domain, for many points at once: an implicit gradient step, which
/// no step size can make explode.
/// </summary>
/// <remarks>
/// <para><b>Ways.</b> V quadratic, or |x − c| in one dimension: closed form. Otherwise Newton's method for y − x + t∇V(y) = 0, eight points at a
/// time: in one dimension inside a bracket that shrinks at every step, with bisection where Newton leaves it; in two dimensions with
/// backtracking on the objective, and with a lifted Hessian where that of the objective is not positive. In two dimensions a V that is a sum over
/// the axes is taken axis by axis, and one that depends on the distance from a point alone is taken along the ray, so that their kinks are exact too.</para>
/// <para><b>Tolerance.</b> |y − x + t∇V(y)| ≤ <see cref="Tolerance"/>·scale in each coordinate, scale the domain's size (the largest of its lengths and
/// the absolute values of its ends). With 1 + t·V″ ≥ c the error of y itself is at most that over c. At a stop (below) y is exact.</para>
/// <para><b>Stops.</b> A point where V′ jumps up (a kink such as that of |x|) is the answer exactly when 0 lies between the two slopes of the
/// objective there; so is a wall when V pushes towards it. In one dimension kinks come from <see cref="Potential.FindKinks"/>. On a circle V is
/// continued periodically, and y is wrapped.</para>
/// <para><b>Uniqueness.</b> The minimiser is unique while 1 + t·λ &gt; 0, λ the least curvature of V (sampled on the domain:
/// <see cref="LeastCurvature"/>). Beyond, the answer is a local minimiser; the caller should say so.</para>
/// <para>Immutable, safe to use from several threads, allocates nothing after construction. Source: N. Parikh, S. Boyd, Proximal Algorithms,
/// Found. Trends Optim. 1 (2014); safeguarded Newton and projected Newton: D. P. Bertsekas, SIAM J. Control Optim. 20 (1982) 221-246.</para>
/// </remarks>
public sealed class ProximalMap
{
    /// <summary>Promise on the residual |y − x + t∇V(y)|, relative to the domain's size.</summary>
    public const double Tolerance = 1e-12;

    private const int Chunk = 256;
    private const int MostIterations = 200;
    private const int PlainIterations = 12;
    private readonly Potential potential;
    private readonly Interval axisX;
    private readonly Interval? axisY;
    private readonly double allowed;
    private readonly double largestSlope;
    private readonly double largestThird;
    private readonly Stop[] stops;
    private readonly Stop[] inner;
    private readonly PotentialForm? closedForm;
    private readonly Domain domain;
    private readonly PlaneStructure? structure;
    private readonly ProximalMap? alongFirst;
    private readonly ProximalMap? alongSecond;

    /// <summary>Looks at a potential on a domain.</summary>
    /// <exception cref="ArgumentException">The dimensions disagree.</exception>
    public ProximalMap(Potential potential, Domain domain)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        Require.That(potential.Dimension == domain.Dimension,
            $"The potential has {potential.Dimension} variable(s) and the domain {domain.Dimension} axis/axes; they must agree.");
        this.potential = potential;
        this.domain = domain;
        axisX = domain.X;
        axisY = domain.Y;
        allowed = Tolerance * Math.Max(SizeOf(axisX), axisY is null ? 0 : SizeOf(axisY));
        var survey = CurvatureSurvey.Of(potential, domain);
        LeastCurvature = survey.Least;
        // Half as much again, since a sampled largest value is not the largest.
        largestSlope = 1.5 * survey.LargestSlope;
        stops = axisY is null ? FindStops() : [];
        inner = [.. stops.Where(stop => axisX.Ends == AxisEnds.Periodic || (stop.Position > axisX.From && stop.Position < axisX.To))];
        largestThird = axisY is null ? SurveyThird() : 0;
        closedForm = axisY is null ? ClosedForms.Usable(potential, axisX) : null;
        structure = PlaneStructure.Find(potential, domain);
        if (structure is null)
            return;
        alongFirst = new ProximalMap(structure.First, new Domain(structure.IsRadial ? new Interval(0, structure.Reach) : axisX));
        alongSecond = structure.Second is { } second ? new ProximalMap(second, new Domain(axisY!)) : null;
    }

    /// <summary>λ, the least eigenvalue of D²V found on the domain (sampled; kinks aside), in units of energy per length².</summary>
    public double LeastCurvature { get; }

    /// <summary>Whether the minimiser is unique for this t, as far as sampling tells.</summary>
    public bool IsUnique(double t) => 1 + t * LeastCurvature > 0;

    /// <summary>Writes prox_{tV} of each point.</summary>
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
        if (structure is not null)
            return structure.Apply(new LineMap(alongFirst!, t), alongSecond is null ? null : new LineMap(alongSecond, t), x, y, targetX, targetY, domain);
        var missed = 0;
        for (var first = 0; first < x.Length; first += Chunk)
        {
            var count = Math.Min(Chunk, x.Length - first);
            missed += axisY is null
                ? Apply1(t, x.Slice(first, count), targetX.Slice(first, count))
                : Apply2(t, x.Slice(first, count), y.Slice(first, count), targetX.Slice(first, count), targetY.Slice(first, count));
        }

        return missed;
    }

    private readonly record struct LineMap(ProximalMap Map, double Time) : PlaneStructure.ILineMap
    {
        public int Apply(ReadOnlySpan<double> x, Span<double> target) => Map.Apply(Time, x, [], target, []);
    }

    private static double SizeOf(Interval axis) => Math.Max(axis.Length, Math.Max(Math.Abs(axis.From), Math.Abs(axis.To)));

    // A point that can be the answer exactly: slopes of V before and after it. A wall is a kink whose outer slope is infinite.
    private readonly record struct Stop(double Position, double SlopeBefore, double SlopeAfter);

    private Stop[] FindStops()
    {
        var found = new List<Stop>();
        var wall = axisX.Ends == AxisEnds.Reflecting;
        if (wall)
            found.Add(new Stop(axisX.From, double.NegativeInfinity, SlopeNear(axisX.From, 1)));
        foreach (var kink in potential.FindKinks(axisX))
        {
            if (kink.Position > axisX.From && kink.Position < axisX.To)
                found.Add(new Stop(kink.Position, kink.SlopeBefore, kink.SlopeAfter));
        }

        if (wall)
            found.Add(new Stop(axisX.To, SlopeNear(axisX.To, -1), double.PositiveInfinity));
        else if (Seam(potential, axisX) is { } seam)
            found.Add(new Stop(axisX.From, seam.SlopeBefore, seam.SlopeAfter));
        return [.. found];
    }

    // Where the ends of a circle meet, a formula that is not periodic has a kink that it does not know of.
    internal static Kink? Seam(Potential potential, Interval axis)
    {
        Span<double> slope = stackalloc double[2];
        potential.Gradient([axis.To, axis.From], [], slope, []);
        var differs = Math.Abs(slope[0] - slope[1]) > 1e-9 * (1 + Math.Abs(slope[0]) + Math.Abs(slope[1]));
        return differs ? new Kink(axis.From, slope[0], slope[1], 0) : null;
    }

    // The slope at a wall, or just inside where V is not defined at the wall itself.
    private double SlopeNear(double position, int inwards)
    {
        Span<double> slope = stackalloc double[1];
        for (var distance = 0.0; distance < 1e-6; distance = distance == 0 ? 1e-15 : 10 * distance)
        {
            potential.Gradient([position + inwards * distance * axisX.Length], [], slope, []);
            if (!double.IsNaN(slope[0]))
                return slope[0];
        }

        return 0;
    }

    // ---- One dimension ----

    [SkipLocalsInit]
    private int Apply1(double t, ReadOnlySpan<double> x, Span<double> target)
    {
        if (closedForm is QuadraticForm quadratic && 1 + t * quadratic.HessianXX > 0)
        {
            var share = 1 / (1 + t * quadratic.HessianXX);
            ClosedForms.Affine(axisX, x, share, -t * quadratic.GradientX * share, target);
            return 0;
        }

        if (closedForm is AbsoluteValueForm absolute)
        {
            ClosedForms.SoftThreshold(axisX, x, absolute.Center, t * absolute.Slope, target);
            return 0;
        }

        var padded = (x.Length + 7) & ~7;
        var storage = AlignedScratch.Of(stackalloc double[10 * Chunk + AlignedScratch.Slack], 10 * Chunk);
        var point = storage[..padded];
        x.CopyTo(point);
        // Padding repeats the last point: it costs nothing more and cannot fail alone.
        point[x.Length..].Fill(x[^1]);
        var position = storage.Slice(Chunk, padded);
        var low = storage.Slice(2 * Chunk, padded);
        var high = storage.Slice(3 * Chunk, padded);
        var value = storage.Slice(4 * Chunk, padded);
        var slope = storage.Slice(5 * Chunk, padded);
        var curvature = storage.Slice(6 * Chunk, padded);
        var periodic = axisX.Ends == AxisEnds.Periodic;
        var wrapped = storage.Slice(7 * Chunk, padded);
        var fold = new AxisFold(axisX);
        var jet = new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature };
        var state = storage.Slice(8 * Chunk, padded);
        var direct = storage.Slice(9 * Chunk, padded);
        if (inner.Length > 0)
        {
            state.Clear();
        }
        else if (Newton(t, point, direct, wrapped, state, jet))
        {
            if (periodic)
                fold.FoldInPlace(direct);
            direct[..x.Length].CopyTo(target);
            return 0;
        }

        Bracket(t, point, position, low, high);
        for (var iteration = 0; iteration < MostIterations; iteration++)
        {
            if (periodic)
                fold.Fold(position, wrapped);
            potential.Jet(periodic ? wrapped : position, [], jet);
            if (Improve(t, iteration > PlainIterations && iteration % 2 == 0, point, position, low, high, slope, curvature))
                break;
        }

        var missed = 0;
        for (var i = 0; i < x.Length; i++)
        {
            // Whoever was found without a bracket is kept: an answer does not depend on who is in the same chunk. The bracket's bounds are equal where
            // the point is settled (see Improve).
            var found = state[i] > 0;
            if (!found && low[i] != high[i])
                missed++;
            target[i] = axisX.Fold(found ? direct[i] : position[i]);
        }

        return missed;
    }

    // Newton's method without a bracket, for points where it just works: no kinks, the objective convex on the way, the answer inside the walls. A step δ
    // leaves a residual of at most t·max|V‴|·δ²/2, so that the last one need not be looked at again. State: 1 found, −1 left to the bracket. True when all
    // were found.
    private bool Newton(double t, Span<double> point, Span<double> position, Span<double> wrapped, Span<double> state, PotentialJet jet)
    {
        var periodic = axisX.Ends == AxisEnds.Periodic;
        var enough = Vector512.Create(Math.Sqrt(2 * allowed / (t * largestThird)));
        ref var points = ref MemoryMarshal.GetReference(point);
        ref var positions = ref MemoryMarshal.GetReference(position);
        ref var states = ref MemoryMarshal.GetReference(state);
        ref var slopes = ref MemoryMarshal.GetReference(jet.GradientX);
        ref var curvatures = ref MemoryMarshal.GetReference(jet.HessianXX);
        var step = Vector512.Create(t);
        var zero = Vector512<double>.Zero;
        var one = Vector512<double>.One;
        point.CopyTo(position);
        state.Clear();
        for (var iteration = 0; iteration < PlainIterations; iteration++)
        {
            if (periodic)
                new AxisFold(axisX).Fold(position, wrapped);
            potential.Jet(periodic ? wrapped : position, [], jet);
            var running = Vector512<long>.Zero;
            for (nuint i = 0; i < (nuint)point.Length; i += 8)
            {
                var y = Vector512.LoadUnsafe(ref positions, i);
                var before = Vector512.LoadUnsafe(ref states, i);
                var force = Vector512.FusedMultiplyAdd(step, Vector512.LoadUnsafe(ref slopes, i), y - Vector512.LoadUnsafe(ref points, i));
                var stiffness = Vector512.FusedMultiplyAdd(step, Vector512.LoadUnsafe(ref curvatures, i), one);
                var move = force / stiffness;
                var open = Vector512.Equals(before, zero);
                var convex = Vector512.GreaterThan(stiffness, Vector512.Create(1e-3));
                var after = Vector512.ConditionalSelect(Vector512.LessThanOrEqual(Vector512.Abs(move), enough), one, zero);
                after = Vector512.ConditionalSelect(convex, after, -one);
                after = Vector512.ConditionalSelect(open, after, before);
                after.StoreUnsafe(ref states, i);
                Vector512.ConditionalSelect(open & convex, y - move, y).StoreUnsafe(ref positions, i);
                running |= Vector512.Equals(after, zero).AsInt64();
            }

            if (Vector512.EqualsAll(running, Vector512<long>.Zero))
                break;
        }

        var from = Vector512.Create(periodic ? double.NegativeInfinity : axisX.From);
        var to = Vector512.Create(periodic ? double.PositiveInfinity : axisX.To);
        var lost = Vector512<long>.Zero;
        for (nuint i = 0; i < (nuint)point.Length; i += 8)
        {
            var y = Vector512.LoadUnsafe(ref positions, i);
            var found = Vector512.GreaterThan(Vector512.LoadUnsafe(ref states, i), zero)
                & Vector512.GreaterThanOrEqual(y, from) & Vector512.LessThanOrEqual(y, to);
            Vector512.ConditionalSelect(found, one, -one).StoreUnsafe(ref states, i);
            lost |= ~found.AsInt64();
        }

        return Vector512.EqualsAll(lost, Vector512<long>.Zero);
    }

    // The largest |V‴| on the domain from differences of V″, doubled since it is sampled.
    private double SurveyThird()
    {
        const int samples = 4096;
        var x = new double[samples + 1];
        for (var i = 0; i <= samples; i++)
            x[i] = axisX.From + (i + 0.5) / (samples + 1) * axisX.Length;
        double[] value = new double[x.Length], slope = new double[x.Length], curvature = new double[x.Length];
        potential.Jet(x, [], new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature });
        var largest = 0.0;
        for (var i = 0; i < samples; i++)
        {
            var change = Math.Abs(curvature[i + 1] - curvature[i]) * (samples + 1) / axisX.Length;
            largest = double.IsFinite(change) ? Math.Max(largest, change) : double.PositiveInfinity;
        }

        return 2 * largest;
    }

    // Settles points whose answer is a stop (low = high = position) and brackets the others between stops, where V is smooth.
    private void Bracket(double t, Span<double> point, Span<double> position, Span<double> low, Span<double> high)
    {
        var periodic = axisX.Ends == AxisEnds.Periodic;
        var reach = periodic ? t * largestSlope : 0;
        var images = periodic && stops.Length > 0 ? (int)Math.Ceiling(reach / axisX.Length) + 1 : 0;
        ref var points = ref MemoryMarshal.GetReference(point);
        ref var positions = ref MemoryMarshal.GetReference(position);
        ref var lows = ref MemoryMarshal.GetReference(low);
        ref var highs = ref MemoryMarshal.GetReference(high);
        var step = Vector512.Create(t);
        for (nuint i = 0; i < (nuint)point.Length; i += 8)
        {
            var x = Vector512.LoadUnsafe(ref points, i);
            var lo = periodic ? x - Vector512.Create(reach) : Vector512.Create(axisX.From);
            var hi = periodic ? x + Vector512.Create(reach) : Vector512.Create(axisX.To);
            var answer = x;
            var settled = Vector512<long>.Zero;
            for (var image = -images; image <= images; image++)
            {
                foreach (var stop in stops)
                {
                    var place = Vector512.Create(stop.Position + image * axisX.Length);
                    var before = Vector512.FusedMultiplyAdd(step, Vector512.Create(stop.SlopeBefore), place - x);
                    var after = Vector512.FusedMultiplyAdd(step, Vector512.Create(stop.SlopeAfter), place - x);
                    var here = Vector512.LessThanOrEqual(before, Vector512<double>.Zero) & Vector512.GreaterThanOrEqual(after, Vector512<double>.Zero);
                    here = Vector512.AndNot(here, settled.AsDouble());
                    answer = Vector512.ConditionalSelect(here, place, answer);
                    settled |= here.AsInt64();
                    // Where both sides lead away (a peak of the objective) the side of x itself is taken.
                    var rootAbove = Vector512.LessThan(after, Vector512<double>.Zero)
                        & (Vector512.LessThanOrEqual(before, Vector512<double>.Zero) | Vector512.GreaterThanOrEqual(x, place));
                    var rootBelow = Vector512.AndNot(Vector512.GreaterThan(before, Vector512<double>.Zero), rootAbove);
                    lo = Vector512.ConditionalSelect(rootAbove & Vector512.GreaterThan(place, lo), place, lo);
                    hi = Vector512.ConditionalSelect(rootBelow & Vector512.LessThan(place, hi), place, hi);
                }
            }

            // A start on a bound is moved inside: there the slope of a kink may be that of either side.
            var inside = Vector512.GreaterThan(x, lo) & Vector512.LessThan(x, hi);
            var guess = Vector512.ConditionalSelect(inside, x, Vector512.Create(0.5) * (lo + hi));
            guess = Vector512.ConditionalSelect(settled.AsDouble(), answer, guess);
            guess.StoreUnsafe(ref positions, i);
            Vector512.ConditionalSelect(settled.AsDouble(), answer, lo).StoreUnsafe(ref lows, i);
            Vector512.ConditionalSelect(settled.AsDouble(), answer, hi).StoreUnsafe(ref highs, i);
        }
    }

    // One Newton or bisection step on every point that is not settled; true when all are. A settled point has low = high = position.
    private bool Improve(
        double t, bool bisect, Span<double> point, Span<double> position, Span<double> low, Span<double> high, Span<double> slope, Span<double> curvature)
    {
        ref var points = ref MemoryMarshal.GetReference(point);
        ref var positions = ref MemoryMarshal.GetReference(position);
        ref var lows = ref MemoryMarshal.GetReference(low);
        ref var highs = ref MemoryMarshal.GetReference(high);
        ref var slopes = ref MemoryMarshal.GetReference(slope);
        ref var curvatures = ref MemoryMarshal.GetReference(curvature);
        var step = Vector512.Create(t);
        var narrow = Vector512.Create(4.5e-16 / Tolerance * allowed);
        var zero = Vector512<double>.Zero;
        var mayJump = bisect ? Vector512<double>.Zero : Vector512<long>.AllBitsSet.AsDouble();
        var all = Vector512<long>.AllBitsSet;
        for (nuint i = 0; i < (nuint)point.Length; i += 8)
        {
            var y = Vector512.LoadUnsafe(ref positions, i);
            var lo = Vector512.LoadUnsafe(ref lows, i);
            var hi = Vector512.LoadUnsafe(ref highs, i);
            var settled = Vector512.Equals(lo, hi);
            var force = Vector512.FusedMultiplyAdd(step, Vector512.LoadUnsafe(ref slopes, i), y - Vector512.LoadUnsafe(ref points, i));
            var stiffness = Vector512.FusedMultiplyAdd(step, Vector512.LoadUnsafe(ref curvatures, i), Vector512<double>.One);
            var near = Vector512.LessThanOrEqual(Vector512.Abs(force), Vector512.Create(allowed)) & Vector512.GreaterThanOrEqual(stiffness, zero);
            // Not-a-number is neither: it moves no bound, so that such a point is never taken for settled.
            lo = Vector512.ConditionalSelect(Vector512.LessThanOrEqual(force, zero), y, lo);
            hi = Vector512.ConditionalSelect(Vector512.GreaterThan(force, zero), y, hi);
            var newton = y - force / stiffness;
            var usable = Vector512.GreaterThan(stiffness, zero) & Vector512.GreaterThan(newton, lo) & Vector512.LessThan(newton, hi) & mayJump;
            var next = Vector512.ConditionalSelect(usable, newton, Vector512.Create(0.5) * (lo + hi));
            var kept = settled | near;
            next = Vector512.ConditionalSelect(kept, y, next);
            var finished = kept | Vector512.LessThanOrEqual(hi - lo, narrow);
            next.StoreUnsafe(ref positions, i);
            Vector512.ConditionalSelect(finished, next, lo).StoreUnsafe(ref lows, i);
            Vector512.ConditionalSelect(finished, next, hi).StoreUnsafe(ref highs, i);
            all &= finished.AsInt64();
        }

        return Vector512.EqualsAll(all, Vector512<long>.AllBitsSet);
    }

    // ---- Two dimensions ----

    [SkipLocalsInit]
    private int Apply2(double t, ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> targetX, Span<double> targetY)
    {
        var storage = AlignedScratch.Of(stackalloc double[20 * PlaneChunk + AlignedScratch.Slack], 20 * PlaneChunk);
        var missed = 0;
        for (var first = 0; first < x.Length; first += PlaneChunk)
        {
            var count = Math.Min(PlaneChunk, x.Length - first);
            var work = new PlaneWork(storage, (count + 7) & ~7);
            x.Slice(first, count).CopyTo(work.PointX);
            y.Slice(first, count).CopyTo(work.PointY);
            work.PointX[count..].Fill(x[first + count - 1]);
            work.PointY[count..].Fill(y[first + count - 1]);
            Minimise(t, work);
            for (var i = 0; i < count; i++)
            {
                if (work.Scale[i] > 0)
                    missed++;
                targetX[first + i] = axisX.Fold(work.X[i]);
                targetY[first + i] = axisY!.Fold(work.Y[i]);
            }
        }

        return missed;
    }

    private const int PlaneChunk = 128;

    // Views into one stack buffer; all of the same padded length.
    private readonly ref struct PlaneWork
    {
        private readonly Span<double> storage;
        private readonly int length;

        public PlaneWork(Span<double> storage, int length)
        {
            this.storage = storage;
            this.length = length;
        }

        public int Length => length;

        public Span<double> PointX => storage[..length];

        public Span<double> PointY => storage.Slice(PlaneChunk, length);

        // The best point so far, its objective and force.
        public Span<double> X => storage.Slice(2 * PlaneChunk, length);

        public Span<double> Y => storage.Slice(3 * PlaneChunk, length);

        public Span<double> Objective => storage.Slice(4 * PlaneChunk, length);

        public Span<double> ForceX => storage.Slice(5 * PlaneChunk, length);

        public Span<double> ForceY => storage.Slice(6 * PlaneChunk, length);

        // Direction and how much of it is being tried; scale 0 marks a settled point.
        public Span<double> DirectionX => storage.Slice(7 * PlaneChunk, length);

        public Span<double> DirectionY => storage.Slice(8 * PlaneChunk, length);

        public Span<double> Scale => storage.Slice(9 * PlaneChunk, length);

        public Span<double> TrialX => storage.Slice(10 * PlaneChunk, length);

        public Span<double> TrialY => storage.Slice(11 * PlaneChunk, length);

        public PotentialJet Jet => new()
        {
            Value = storage.Slice(12 * PlaneChunk, length),
            GradientX = storage.Slice(13 * PlaneChunk, length),
            GradientY = storage.Slice(14 * PlaneChunk, length),
            HessianXX = storage.Slice(15 * PlaneChunk, length),
            HessianXY = storage.Slice(16 * PlaneChunk, length),
            HessianYY = storage.Slice(17 * PlaneChunk, length),
        };

        public Span<double> WrappedX => storage.Slice(18 * PlaneChunk, length);

        public Span<double> WrappedY => storage.Slice(19 * PlaneChunk, length);
    }

    private void Minimise(double t, PlaneWork work)
    {
        work.PointX.CopyTo(work.TrialX);
        work.PointY.CopyTo(work.TrialY);
        work.PointX.CopyTo(work.X);
        work.PointY.CopyTo(work.Y);
        work.Objective.Fill(double.PositiveInfinity);
        work.ForceX.Clear();
        work.ForceY.Clear();
        work.DirectionX.Clear();
        work.DirectionY.Clear();
        work.Scale.Fill(1);
        var jet = work.Jet;
        for (var iteration = 0; iteration < MostIterations; iteration++)
        {
            var evaluatedX = work.TrialX;
            var evaluatedY = work.TrialY;
            if (axisX.Ends == AxisEnds.Periodic)
                new AxisFold(axisX).Fold(work.TrialX, evaluatedX = work.WrappedX);
            if (axisY!.Ends == AxisEnds.Periodic)
                new AxisFold(axisY).Fold(work.TrialY, evaluatedY = work.WrappedY);
            potential.Jet(evaluatedX, evaluatedY, jet);
            if (ImprovePlane(t, work, jet))
                return;
        }
    }

    // Judges every trial point: takes it and aims anew, or goes back half way. True when all points are settled.
    private bool ImprovePlane(double t, PlaneWork work, PotentialJet jet)
    {
        var step = Vector512.Create(t);
        var zero = Vector512<double>.Zero;
        var one = Vector512<double>.One;
        var half = Vector512.Create(0.5);
        var small = Vector512.Create(allowed);
        var wallX = axisX.Ends == AxisEnds.Reflecting;
        var wallY = axisY!.Ends == AxisEnds.Reflecting;
        var fromX = Vector512.Create(wallX ? axisX.From : double.NegativeInfinity);
        var toX = Vector512.Create(wallX ? axisX.To : double.PositiveInfinity);
        var fromY = Vector512.Create(wallY ? axisY.From : double.NegativeInfinity);
        var toY = Vector512.Create(wallY ? axisY.To : double.PositiveInfinity);
        var all = Vector512<long>.AllBitsSet;
        for (var i = 0; i < work.Length; i += 8)
        {
            var scale = Load(work.Scale, i);
            var settled = Vector512.Equals(scale, zero);
            var trialX = Load(work.TrialX, i);
            var trialY = Load(work.TrialY, i);
            var currentX = Load(work.X, i);
            var currentY = Load(work.Y, i);
            var shiftX = trialX - Load(work.PointX, i);
            var shiftY = trialY - Load(work.PointY, i);
            var objective = Vector512.FusedMultiplyAdd(step, Load(jet.Value, i), half * Vector512.FusedMultiplyAdd(shiftX, shiftX, shiftY * shiftY));
            var forceX = Vector512.FusedMultiplyAdd(step, Load(jet.GradientX, i), shiftX);
            var forceY = Vector512.FusedMultiplyAdd(step, Load(jet.GradientY, i), shiftY);
            // A coordinate at a wall that V pushes into is held there.
            var heldX = (Vector512.LessThanOrEqual(trialX, fromX) & Vector512.GreaterThan(forceX, zero))
                | (Vector512.GreaterThanOrEqual(trialX, toX) & Vector512.LessThan(forceX, zero));
            var heldY = (Vector512.LessThanOrEqual(trialY, fromY) & Vector512.GreaterThan(forceY, zero))
                | (Vector512.GreaterThanOrEqual(trialY, toY) & Vector512.LessThan(forceY, zero));
            forceX = Vector512.AndNot(forceX, heldX);
            forceY = Vector512.AndNot(forceY, heldY);
            var oldX = Load(work.ForceX, i);
            var oldY = Load(work.ForceY, i);
            var old = Load(work.Objective, i);
            // Sufficient decrease along the step really made; near the end, where the objective no longer resolves it, a halved force.
            var promised = Vector512.FusedMultiplyAdd(oldX, trialX - currentX, oldY * (trialY - currentY));
            var fallen = Vector512.LessThanOrEqual(objective, Vector512.FusedMultiplyAdd(Vector512.Create(1e-4), promised, old));
            var oldForce = Vector512.Max(Vector512.Abs(oldX), Vector512.Abs(oldY));
            var calmer = Vector512.LessThanOrEqual(Vector512.Max(Vector512.Abs(forceX), Vector512.Abs(forceY)), half * oldForce)
                & Vector512.LessThanOrEqual(oldForce, Vector512.Create(1e-6 / Tolerance * allowed));
            var taken = Vector512.AndNot(fallen | calmer, settled);

            currentX = Vector512.ConditionalSelect(taken, trialX, currentX);
            currentY = Vector512.ConditionalSelect(taken, trialY, currentY);
            var a = Vector512.FusedMultiplyAdd(step, Load(jet.HessianXX, i), one);
            var b = Vector512.AndNot(step * Load(jet.HessianXY, i), heldX | heldY);
            var c = Vector512.FusedMultiplyAdd(step, Load(jet.HessianYY, i), one);
            var determinant = a * c - b * b;
            var convex = Vector512.GreaterThan(a, zero) & Vector512.GreaterThan(determinant, zero);
            if (!Vector512.EqualsAll(convex.AsInt64(), Vector512<long>.AllBitsSet))
            {
                // Where the objective is not convex, its Hessian is lifted until its least eigenvalue is a hundredth: a descent direction still.
                var middle = half * (a + c);
                var least = middle - Vector512.Sqrt(Vector512.FusedMultiplyAdd(middle - c, middle - c, b * b));
                var lift = Vector512.ConditionalSelect(convex, zero, Vector512.Create(0.01) - least);
                a += lift;
                c += lift;
                determinant = a * c - b * b;
            }

            var aimX = (b * forceY - c * forceX) / determinant;
            var aimY = (b * forceX - a * forceY) / determinant;
            var directionX = Vector512.ConditionalSelect(taken, aimX, Load(work.DirectionX, i));
            var directionY = Vector512.ConditionalSelect(taken, aimY, Load(work.DirectionY, i));
            var near = taken & Vector512.LessThanOrEqual(Vector512.Abs(forceX), small) & Vector512.LessThanOrEqual(Vector512.Abs(forceY), small);
            scale = Vector512.ConditionalSelect(taken, one, half * scale);
            scale = Vector512.ConditionalSelect(settled | near, zero, scale);
            var nextX = Clamp(Vector512.FusedMultiplyAdd(scale, directionX, currentX), fromX, toX);
            var nextY = Clamp(Vector512.FusedMultiplyAdd(scale, directionY, currentY), fromY, toY);

            Store(currentX, work.X, i);
            Store(currentY, work.Y, i);
            Store(Vector512.ConditionalSelect(taken, objective, old), work.Objective, i);
            Store(Vector512.ConditionalSelect(taken, forceX, oldX), work.ForceX, i);
            Store(Vector512.ConditionalSelect(taken, forceY, oldY), work.ForceY, i);
            Store(directionX, work.DirectionX, i);
            Store(directionY, work.DirectionY, i);
            Store(scale, work.Scale, i);
            Store(nextX, work.TrialX, i);
            Store(nextY, work.TrialY, i);
            all &= Vector512.Equals(scale, zero).AsInt64();
        }

        return Vector512.EqualsAll(all, Vector512<long>.AllBitsSet);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> Load(Span<double> span, int index) => Vector512.LoadUnsafe(ref MemoryMarshal.GetReference(span), (nuint)index);

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static void Store(Vector512<double> value, Span<double> span, int index) => value.StoreUnsafe(ref MemoryMarshal.GetReference(span), (nuint)index);

    // Not-a-number passes through and is judged at the next trial.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static Vector512<double> Clamp(Vector512<double> value, Vector512<double> from, Vector512<double> to)
    {
        value = Vector512.ConditionalSelect(Vector512.LessThan(value, from), from, value);
        return Vector512.ConditionalSelect(Vector512.GreaterThan(value, to), to, value);
    }
}
