using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>
/// Proposals Y = a(X) + √(2MTτ) ξ, a an explicit or a proximal step, accepted with probability min(1, e^R), R = (V(X) − V(Y))/T + (|Y − a(X)|² − |X − a(Y)|²)/(4MTτ),
/// which leaves π unchanged for every step.
/// </summary>
/// <remarks>
/// At walls a proposal outside is refused, which keeps π cut off at the walls. On a circle the move counts as it was made, along the line on which V goes on
/// periodically: to each move there is its reverse. V and a(X) are kept from one step to the next, so that a step costs one evaluation.
/// </remarks>
internal sealed class MetropolisRun : TiledRun
{
    private readonly ProximalMap? proximal;
    private readonly double[] valueStorage;
    private readonly double[] aimStorageX;
    private readonly double[] aimStorageY;
    private readonly int valueOffset;
    private readonly int aimOffsetX;
    private readonly int aimOffsetY;
    private double time;
    private double deviation;
    private double aimsHoldFor = double.NaN;
    private bool refresh;

    public MetropolisRun(bool isProximal, Problem problem, int walkers, ulong seed, WorkerTeam team)
        : base(problem, walkers, seed, team)
    {
        proximal = isProximal ? new ProximalMap(problem.Potential, problem.Domain) : null;
        var padded = (walkers + 15) & ~15;
        (valueStorage, valueOffset) = AlignedArray(padded);
        (aimStorageX, aimOffsetX) = AlignedArray(padded);
        (aimStorageY, aimOffsetY) = problem.Dimension == 2 ? AlignedArray(padded) : ([], 0);
    }

    protected override EnsembleReport AdvanceCore(double step)
    {
        time = Problem.Mobility * step;
        deviation = Math.Sqrt(2 * Problem.Temperature * time);
        refresh = aimsHoldFor != time;
        var changed = refresh;
        aimsHoldFor = time;
        long accepted = 0;
        int stuck = 0, firstStuck = -1;
        foreach (ref readonly var outcome in RunTiles())
        {
            accepted += outcome.Accepted;
            if (outcome.Missed > 0 && stuck == 0)
                firstStuck = outcome.FirstMissed;
            stuck += outcome.Missed;
        }

        var failure = stuck == 0 ? null : FormattableString.Invariant(
            $"At step {StepsTaken + 1} the potential or its proposal is not finite at {stuck} of {Count} walkers, the first one at x = {X[firstStuck]:g6}{(IsPlane ? FormattableString.Invariant($", y = {Y[firstStuck]:g6}") : "")}: they can never move.");
        var warning = changed && proximal is not null && !proximal.IsUnique(time)
            ? FormattableString.Invariant($"The proximal step of {time:g4} is too long for a unique minimiser (least curvature of V: {proximal.LeastCurvature:g4}). Acceptance keeps the right law all the same as long as the same point is always found.")
            : null;
        return new EnsembleReport(failure, warning, (double)accepted / Count);
    }

    [SkipLocalsInit]
    protected override void AdvanceTile(int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome)
    {
        var storage = AlignedScratch.Of(stackalloc double[9 * TileLength + AlignedScratch.Slack], 9 * TileLength);
        var n = x.Length;
        var value = valueStorage.AsSpan(valueOffset + first, n);
        var aimX = aimStorageX.AsSpan(aimOffsetX + first, n);
        var aimY = IsPlane ? aimStorageY.AsSpan(aimOffsetY + first, n) : [];
        var score = storage[..n];
        var proposalX = storage.Slice(TileLength, n);
        var placeX = storage.Slice(2 * TileLength, n);
        var newValue = storage.Slice(3 * TileLength, n);
        var newAimX = storage.Slice(4 * TileLength, n);
        var proposalY = IsPlane ? storage.Slice(5 * TileLength, n) : [];
        var placeY = IsPlane ? storage.Slice(6 * TileLength, n) : [];
        var newAimY = IsPlane ? storage.Slice(7 * TileLength, n) : [];
        if (refresh)
        {
            Evaluate(x, y, value, aimX, aimY);
            NoteStuck(value, aimX, aimY, first, count, ref outcome);
        }

        // −ln of a uniform number: the proposal is accepted when R plus it is above 0.
        AcceptanceDraws.Fill(new StreamKey(Seed, StreamPurpose.Acceptance, StreamStep), (ulong)first, score);
        DrawNormals(StreamPurpose.Noise, first, proposalX);
        Propose(FoldX, Problem.Domain.X, x, aimX, proposalX, placeX, score);
        if (IsPlane)
        {
            DrawNormals(StreamPurpose.Noise + 1, first, proposalY);
            Propose(FoldY, Problem.Domain.Y!, y, aimY, proposalY, placeY, score);
        }

        Evaluate(placeX, placeY, newValue, newAimX, newAimY);
        Return(Problem.Domain.X, x, proposalX, placeX, newAimX, score);
        if (IsPlane)
            Return(Problem.Domain.Y!, y, proposalY, placeY, newAimY, score);
        outcome.Accepted += Decide(count, score, value, newValue, x, placeX, aimX, newAimX, y, placeY, aimY, newAimY);
    }

    // V and what the proposal is made of: the gradient, or the proximal point.
    private void Evaluate(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value, Span<double> aimX, Span<double> aimY)
    {
        Problem.Potential.Value(x, y, value);
        if (proximal is null)
            Problem.Potential.Gradient(x, y, aimX, aimY);
        else
            proximal.Apply(time, x, y, aimX, aimY);
    }

    private static void NoteStuck(ReadOnlySpan<double> value, ReadOnlySpan<double> aimX, ReadOnlySpan<double> aimY, int first, int count, ref BlockOutcome outcome)
    {
        for (var i = 0; i < count; i++)
        {
            if (double.IsFinite(value[i]) && double.IsFinite(aimX[i]) && (aimY.Length == 0 || double.IsFinite(aimY[i])))
                continue;
            if (outcome.Missed == 0)
                outcome.FirstMissed = first + i;
            outcome.Missed++;
        }
    }

    // On entry the proposal holds standard normal numbers. |Y − a(X)|²/(4MTτ) is half their square.
    private void Propose(
        in AxisFold fold, Interval interval, ReadOnlySpan<double> x, ReadOnlySpan<double> aim, Span<double> proposal, Span<double> place, Span<double> score)
    {
        var periodic = interval.Ends == AxisEnds.Periodic;
        ref var positions = ref MemoryMarshal.GetReference(x);
        ref var aims = ref MemoryMarshal.GetReference(aim);
        ref var proposals = ref MemoryMarshal.GetReference(proposal);
        ref var places = ref MemoryMarshal.GetReference(place);
        ref var scores = ref MemoryMarshal.GetReference(score);
        var from = Vector512.Create(interval.From);
        var to = Vector512.Create(interval.To);
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var position = Vector512.LoadUnsafe(ref positions, i);
            var normal = Vector512.LoadUnsafe(ref proposals, i);
            var known = Vector512.LoadUnsafe(ref scores, i);
            var moved = Vector512.FusedMultiplyAdd(Vector512.Create(deviation), normal, Forward(position, Vector512.LoadUnsafe(ref aims, i), position, interval));
            known = Vector512.FusedMultiplyAdd(Vector512.Create(0.5) * normal, normal, known);
            var held = moved;
            if (periodic)
            {
                held = fold.Fold(moved);
            }
            else
            {
                var inside = Vector512.GreaterThanOrEqual(moved, from) & Vector512.LessThanOrEqual(moved, to);
                held = Vector512.ConditionalSelect(inside, moved, position);
                known = Vector512.ConditionalSelect(inside, known, Vector512.Create(double.NegativeInfinity));
            }

            moved.StoreUnsafe(ref proposals, i);
            held.StoreUnsafe(ref places, i);
            known.StoreUnsafe(ref scores, i);
        }
    }

    // a(X) on the line of the walker at position, from what is kept for its place in the domain.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private Vector512<double> Forward(Vector512<double> position, Vector512<double> aim, Vector512<double> place, Interval interval)
    {
        if (proximal is null)
            return Vector512.FusedMultiplyAdd(Vector512.Create(-time), aim, position);
        var shift = aim - place;
        if (interval.Ends == AxisEnds.Periodic)
            shift -= Vector512.Create(interval.Length) * Vector512.Round(shift / Vector512.Create(interval.Length));
        return position + shift;
    }

    private void Return(
        Interval interval, ReadOnlySpan<double> x, ReadOnlySpan<double> proposal, ReadOnlySpan<double> place, ReadOnlySpan<double> aim, Span<double> score)
    {
        ref var positions = ref MemoryMarshal.GetReference(x);
        ref var aims = ref MemoryMarshal.GetReference(aim);
        ref var proposals = ref MemoryMarshal.GetReference(proposal);
        ref var places = ref MemoryMarshal.GetReference(place);
        ref var scores = ref MemoryMarshal.GetReference(score);
        var scale = Vector512.Create(1 / (4 * Problem.Temperature * time));
        for (nuint i = 0; i < (nuint)x.Length; i += 8)
        {
            var back = Forward(Vector512.LoadUnsafe(ref proposals, i), Vector512.LoadUnsafe(ref aims, i), Vector512.LoadUnsafe(ref places, i), interval);
            var distance = Vector512.LoadUnsafe(ref positions, i) - back;
            Vector512.FusedMultiplyAdd(-scale * distance, distance, Vector512.LoadUnsafe(ref scores, i)).StoreUnsafe(ref scores, i);
        }
    }

    private int Decide(
        int count, Span<double> score, Span<double> value, Span<double> newValue, Span<double> x, Span<double> placeX, Span<double> aimX, Span<double> newAimX,
        Span<double> y, Span<double> placeY, Span<double> aimY, Span<double> newAimY)
    {
        ref var scores = ref MemoryMarshal.GetReference(score);
        ref var values = ref MemoryMarshal.GetReference(value);
        ref var newValues = ref MemoryMarshal.GetReference(newValue);
        var perTemperature = Vector512.Create(1 / Problem.Temperature);
        var accepted = Vector512<long>.Zero;
        var numbers = Vector512.Create(0L, 1, 2, 3, 4, 5, 6, 7);
        for (var i = 0; i < score.Length; i += 8)
        {
            var old = Vector512.LoadUnsafe(ref values, (nuint)i);
            var found = Vector512.LoadUnsafe(ref newValues, (nuint)i);
            // Not-a-number anywhere makes the comparison false: refused.
            var taken = Vector512.GreaterThan(Vector512.FusedMultiplyAdd(old - found, perTemperature, Vector512.LoadUnsafe(ref scores, (nuint)i)), Vector512<double>.Zero);
            Vector512.ConditionalSelect(taken, found, old).StoreUnsafe(ref values, (nuint)i);
            Take(taken, i, placeX, x);
            Take(taken, i, newAimX, aimX);
            if (y.Length > 0)
            {
                Take(taken, i, placeY, y);
                Take(taken, i, newAimY, aimY);
            }

            accepted -= taken.AsInt64() & Vector512.LessThan(numbers + Vector512.Create((long)i), Vector512.Create((long)count));
        }

        return (int)Vector512.Sum(accepted);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static void Take(Vector512<double> taken, int i, Span<double> source, Span<double> target)
    {
        ref var targets = ref MemoryMarshal.GetReference(target);
        var kept = Vector512.LoadUnsafe(ref targets, (nuint)i);
        Vector512.ConditionalSelect(taken, Vector512.LoadUnsafe(ref MemoryMarshal.GetReference(source), (nuint)i), kept).StoreUnsafe(ref targets, (nuint)i);
    }
}
