using System.Buffers;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Diagnostics;

/// <summary>
/// How far from a density its own samples lie: the law of W2(N independent draws, density), by simulation. No ensemble of N walkers can be
/// closer than this on average, and a distance that is large against it shows a wrong law. Immutable.
/// </summary>
/// <remarks>
/// In one dimension each simulated set is drawn in ascending order, without sorting: the partial sums of N + 1 exponential numbers, divided by
/// their total, are N uniform numbers in order (L. Devroye, Non-Uniform Random Variate Generation, Springer 1986, chapter V; from memory), and the
/// density's quantile function carries them to its law. The distance is exact, on the line or the circle. The same seed gives the same distances at
/// any number of threads. Memory: 8·N bytes, and 8·N for each thread (twice that on a circle).
/// </remarks>
public sealed class NoiseFloor
{
    private const uint Purpose = 0x4E464C52;
    private readonly double[] distances;

    /// <summary>Holds simulated distances.</summary>
    /// <param name="distances">One a draw, in units of length, in any order; copied.</param>
    /// <exception cref="ArgumentException">There are none, or one is not finite or below 0.</exception>
    public NoiseFloor(ReadOnlySpan<double> distances)
    {
        Require.That(distances.Length > 0, "The list of simulated distances was empty; it must hold at least one.");
        this.distances = distances.ToArray();
        Array.Sort(this.distances);
        Require.That(this.distances[0] >= 0 && double.IsFinite(this.distances[^1]), "A simulated distance was negative or not finite; it must be neither.");
        Mean = SpanKernels.Sum(this.distances) / distances.Length;
        var squares = SpanKernels.Dot(this.distances, this.distances);
        MeanSquare = squares / distances.Length;
    }

    /// <summary>The simulated distances, ascending, in units of length.</summary>
    public ReadOnlySpan<double> Distances => distances;

    /// <summary>Their mean.</summary>
    public double Mean { get; }

    /// <summary>Mean of their squares, in units of length².</summary>
    public double MeanSquare { get; }

    /// <summary>The least simulated distance that at least 95 % of them do not exceed.</summary>
    public double Percentile95 => distances[(int)Math.Ceiling(0.95 * distances.Length) - 1];

    /// <summary>
    /// The p-value of an observed distance: (1 + number of simulated distances at least as large) / (1 + number of draws), which is never 0 and never
    /// too small on average (B. Phipson, G. K. Smyth, Permutation p-values should never be zero, Stat. Appl. Genet. Mol. Biol. 9 (2010), article 39).
    /// </summary>
    public double PValue(double distance)
    {
        Require.Finite(distance);
        var (low, high) = (0, distances.Length);
        while (low < high)
        {
            var middle = (low + high) >>> 1;
            if (distances[middle] < distance)
                low = middle + 1;
            else
                high = middle;
        }

        return (1.0 + distances.Length - low) / (1.0 + distances.Length);
    }

    /// <summary>Simulates; null where there is no method for the density's dimension.</summary>
    /// <param name="density">The law to draw from and to compare with.</param>
    /// <param name="count">N, samples in each draw; at least 1.</param>
    /// <param name="draws">Number of draws; at least 1.</param>
    /// <param name="seed">Seed; the numbers are independent of those of an ensemble with the same seed.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <param name="cancellation">Stops between two draws.</param>
    /// <exception cref="ArgumentException">The density is not a number or without mass, or a count is below 1.</exception>
    /// <exception cref="OperationCanceledException">Cancelled.</exception>
    public static NoiseFloor? Simulate(Density density, int count, int draws, ulong seed, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(team);
        Require.AtLeast(count, 1);
        Require.AtLeast(draws, 1);
        if (density.Grid.Dimension != 1)
            return PlaneNoiseFloor.Simulate(density, count, draws, seed, team, cancellation);
        var simulation = new Simulation(density, count, seed);
        var found = new double[draws];
        team.Run(draws, draw =>
        {
            cancellation.ThrowIfCancellationRequested();
            found[draw] = density.Grid.X.IsPeriodic ? simulation.OnCircle((uint)draw) : simulation.OnLine((uint)draw);
        });
        return new NoiseFloor(found);
    }

    private sealed class Simulation
    {
        private readonly int count;
        private readonly ulong seed;
        private readonly double length;
        private readonly double[] edges;
        private readonly double[] cumulative;

        // The mean of the density's share i/N … (i+1)/N, and the sum over shares of the mean square about it: then
        // W2² = Σ (x_i − mean_i)²/N + within, a sum of squares from which nothing is subtracted.
        private readonly double[] means;
        private readonly double within;

        public Simulation(Density density, int count, ulong seed)
        {
            length = density.Grid.X.Interval.Length;
            this.count = count;
            this.seed = seed;
            var axis = density.Grid.X;
            var quantile = new QuantileFunction(density);

            // Cells without mass are taken out: the edges of the rest come in pairs.
            var held = 0;
            for (var cell = 0; cell < axis.Cells; cell++)
                held += quantile.MassAtEdges[cell + 1] > quantile.MassAtEdges[cell] ? 1 : 0;
            edges = new double[2 * held];
            cumulative = new double[held + 1];
            for (int cell = 0, k = 0; cell < axis.Cells; cell++)
            {
                if (!(quantile.MassAtEdges[cell + 1] > quantile.MassAtEdges[cell]))
                    continue;
                edges[2 * k] = axis.Edge(cell);
                edges[2 * k + 1] = axis.Edge(cell + 1);
                cumulative[++k] = quantile.MassAtEdges[cell + 1];
            }

            (means, within) = axis.IsPeriodic ? ([], 0) : Shares();
        }

        public double OnLine(uint draw)
        {
            var buffer = ArrayPool<double>.Shared.Rent(count + 1);
            try
            {
                var positions = buffer.AsSpan(0, count);
                DrawAscending(draw, buffer.AsSpan(0, count + 1));
                return Math.Sqrt(SumOfSquaredDifferences(positions, means) / count + within);
            }
            finally
            {
                ArrayPool<double>.Shared.Return(buffer);
            }
        }

        public double OnCircle(uint draw)
        {
            var buffer = ArrayPool<double>.Shared.Rent(count + 1);
            var sums = ArrayPool<double>.Shared.Rent(count + 1);
            try
            {
                DrawAscending(draw, buffer.AsSpan(0, count + 1));
                var positions = buffer.AsSpan(0, count);
                return Math.Sqrt(CostAtCut(positions, BestCut(positions, sums.AsSpan(0, count + 1))));
            }
            finally
            {
                ArrayPool<double>.Shared.Return(buffer);
                ArrayPool<double>.Shared.Return(sums);
            }
        }

        // Leaves the positions in the first N places.
        private void DrawAscending(uint draw, Span<double> buffer)
        {
            new ExponentialDraws(seed, Purpose, draw).Fill(0, buffer);
            var total = RunningSums(buffer);
            var positions = buffer[..count];
            var cell = 0;
            var i = 0;
            while (i < count)
            {
                var below = cumulative[cell] * total;
                var above = cumulative[cell + 1] * total;
                var last = cell == edges.Length / 2 - 1;
                var slope = (edges[2 * cell + 1] - edges[2 * cell]) / (above - below);
                var from = edges[2 * cell];
                while (i + 8 <= count && (positions[i + 7] <= above || last))
                {
                    ref var place = ref positions[i];
                    var sum = Vector512.LoadUnsafe(ref place);
                    Vector512.FusedMultiplyAdd(sum - Vector512.Create(below), Vector512.Create(slope), Vector512.Create(from)).StoreUnsafe(ref place);
                    i += 8;
                }

                while (i < count && (positions[i] <= above || last))
                {
                    positions[i] = Math.FusedMultiplyAdd(positions[i] - below, slope, from);
                    i++;
                }

                cell++;
            }
        }

        // In place, eight at a time in a fixed order; returns the sum of all.
        private static double RunningSums(Span<double> numbers)
        {
            var carry = Vector512<double>.Zero;
            var zero = Vector512<double>.Zero;
            var i = 0;
            for (; i + 8 <= numbers.Length; i += 8)
            {
                ref var place = ref numbers[i];
                var v = Vector512.LoadUnsafe(ref place);
                v += Vector512.ConditionalSelect(Vector512.Create(0L, -1, -1, -1, -1, -1, -1, -1).AsDouble(),
                    Vector512.Shuffle(v, Vector512.Create(0L, 0, 1, 2, 3, 4, 5, 6)), zero);
                v += Vector512.ConditionalSelect(Vector512.Create(0L, 0, -1, -1, -1, -1, -1, -1).AsDouble(),
                    Vector512.Shuffle(v, Vector512.Create(0L, 0, 0, 1, 2, 3, 4, 5)), zero);
                v += Vector512.ConditionalSelect(Vector512.Create(0L, 0, 0, 0, -1, -1, -1, -1).AsDouble(),
                    Vector512.Shuffle(v, Vector512.Create(0L, 0, 0, 0, 0, 1, 2, 3)), zero);
                v += carry;
                v.StoreUnsafe(ref place);
                carry = Vector512.Create(v[7]);
            }

            var sum = carry[0];
            for (; i < numbers.Length; i++)
            {
                sum += numbers[i];
                numbers[i] = sum;
            }

            return sum;
        }

        private static double SumOfSquaredDifferences(ReadOnlySpan<double> a, ReadOnlySpan<double> b)
        {
            var sums = Vector512<double>.Zero;
            var left = MemoryMarshal.Cast<double, Vector512<double>>(a);
            var right = MemoryMarshal.Cast<double, Vector512<double>>(b);
            for (var k = 0; k < left.Length; k++)
            {
                var difference = left[k] - right[k];
                sums = Vector512.FusedMultiplyAdd(difference, difference, sums);
            }

            Span<double> parts = stackalloc double[8];
            sums.CopyTo(parts);
            var rest = 0.0;
            for (var i = left.Length * 8; i < a.Length; i++)
                rest += (a[i] - b[i]) * (a[i] - b[i]);
            return SpanKernels.Sum(parts) + rest;
        }

        private (double[] Means, double Within) Shares()
        {
            var mean = new double[count];
            var sum = 0.0;
            int cell = 0, turn = 0;
            for (var i = 0; i < count; i++)
            {
                var share = ShareOf(i, 0, ref cell, ref turn);
                mean[i] = share.Mean;
                sum += share.Spread;
            }

            return (mean, sum);
        }

        // Mean of the density's quantile function over mass coordinates i/N + cut … (i + 1)/N + cut, and the integral of its square about that mean.
        // The first cell to look at comes in, the cell that holds the upper end goes out.
        private (double Mean, double Spread) ShareOf(int i, double cut, ref int cell, ref int turn)
        {
            var mass = i / (double)count + cut;
            var end = i == count - 1 ? 1 + cut : (i + 1.0) / count + cut;
            double weight = 0, center = 0, spread = 0;
            while (true)
            {
                var next = Math.Min(end, cumulative[cell + 1] + turn);
                var piece = next - mass;
                if (piece > 0)
                {
                    var (from, to) = (Position(cell, turn, mass), Position(cell, turn, next));
                    var middle = 0.5 * (from + to);
                    var joined = weight + piece;
                    // Two weighted groups joined: their squares about the common mean.
                    spread += piece * (to - from) * (to - from) / 12 + weight * piece / joined * (middle - center) * (middle - center);
                    center += piece / joined * (middle - center);
                    weight = joined;
                    mass = next;
                }

                if (next >= end)
                    return (center, spread);
                if (++cell == edges.Length / 2)
                {
                    cell = 0;
                    turn++;
                }
            }
        }

        private double Position(int cell, int turn, double mass)
            => edges[2 * cell] + turn * length + (mass - turn - cumulative[cell]) / (cumulative[cell + 1] - cumulative[cell])
                * (edges[2 * cell + 1] - edges[2 * cell]);

        private double CostAtCut(ReadOnlySpan<double> positions, double cut)
        {
            var turn = (int)Math.Floor(cut);
            var cell = 0;
            var squares = Vector512<double>.Zero;
            double rest = 0, spread = 0;
            var perSample = 1.0 / count;
            for (var i = 0; i < count;)
            {
                // Shares i … whole − 1 lie in this cell, where the quantile function is linear: a share's mean is its middle.
                var whole = (int)Math.Clamp(Math.Floor((cumulative[cell + 1] + turn - cut) * count * (1 - 1e-15)), i, count);
                if (whole > i)
                {
                    var slope = (edges[2 * cell + 1] - edges[2 * cell]) / (cumulative[cell + 1] - cumulative[cell]);
                    var from = edges[2 * cell] + turn * length + (cut - turn - cumulative[cell]) * slope;
                    var rise = slope * perSample;
                    spread += (whole - i) * (rise * rise * perSample / 12);
                    var steps = Vector512.Create(0.5, 1.5, 2.5, 3.5, 4.5, 5.5, 6.5, 7.5);
                    for (; i + 8 <= whole; i += 8)
                    {
                        var middle = Vector512.FusedMultiplyAdd(steps + Vector512.Create((double)i), Vector512.Create(rise), Vector512.Create(from));
                        var difference = Vector512.LoadUnsafe(in positions[i]) - middle;
                        squares = Vector512.FusedMultiplyAdd(difference, difference, squares);
                    }

                    for (; i < whole; i++)
                    {
                        var difference = positions[i] - Math.FusedMultiplyAdd(i + 0.5, rise, from);
                        rest += difference * difference;
                    }
                }

                if (i == count)
                    break;
                var share = ShareOf(i, cut, ref cell, ref turn);
                rest += (positions[i] - share.Mean) * (positions[i] - share.Mean);
                spread += share.Spread;
                i++;
            }

            Span<double> parts = stackalloc double[8];
            squares.CopyTo(parts);
            return (SpanKernels.Sum(parts) + rest) / count + spread;
        }

        // Where the derivative of the cost in the cut changes sign. It is F(θ) = Σ gap_i (P(i/N + θ) − (x_{i−1} + x_i)/2), i = 1 … N, with P the
        // density's quantile function and gap_i = x_i − x_{i−1}. P is linear in each cell, so that a cell's share of the sum needs only Σ gap_i and
        // Σ i·gap_i, which the running sums of x give: an evaluation costs O(cells), not O(N).
        private double BestCut(ReadOnlySpan<double> positions, Span<double> sums)
        {
            sums[0] = 0;
            for (var i = 0; i < positions.Length; i++)
                sums[i + 1] = sums[i] + (positions[i] - positions[0]);
            double low = -1, high = 1, cut = 0;
            for (var evaluation = 1; high - low > 1e-11 && evaluation < 100; evaluation++)
            {
                var (slope, curvature) = CutDerivatives(positions, sums, cut);
                if (slope == 0)
                    return cut;
                if (slope < 0)
                    low = cut;
                else
                    high = cut;
                // Once Newton is close it is carried too far, so that the bracket closes from both sides.
                var newton = -slope / curvature;
                var next = cut + (Math.Abs(newton) < 0.01 * (high - low) ? 2 * newton + Math.CopySign(2e-12, newton) : newton);
                cut = next > low && next < high && evaluation % 4 != 0 ? next : low + 0.5 * (high - low);
            }

            return low + 0.5 * (high - low);
        }

        private (double Slope, double Curvature) CutDerivatives(ReadOnlySpan<double> positions, ReadOnlySpan<double> sums, double cut)
        {
            var cells = edges.Length / 2;
            var origin = positions[0];
            double slope = 0, curvature = 0;
            var i = 1;
            var turn = Math.Floor(cut + 1.0 / count);
            var cell = 0;
            while (i <= count)
            {
                // Indices i … end − 1 have their mass coordinate i/N + cut in this cell.
                var above = cumulative[cell + 1] + turn - cut;
                var end = (int)Math.Clamp(Math.Floor(above * count) + 1, i, count + 1);
                if (end > i)
                {
                    var inCell = (edges[2 * cell + 1] - edges[2 * cell]) / (cumulative[cell + 1] - cumulative[cell]);
                    var first = positions[i - 1] - origin;
                    var last = (end - 1 == count ? positions[0] + length : positions[end - 1]) - origin;
                    var gaps = last - first;
                    // Σ i gap_i = (end − 1) x_{end−1} − i x_{i−1} − Σ_{j=i}^{end−2} x_j, by parts.
                    var weighted = (end - 1.0) * last - i * first - (sums[end - 1] - sums[i]);
                    var atZero = edges[2 * cell] - origin + turn * length + (cut - turn - cumulative[cell]) * inCell;
                    slope += gaps * atZero + weighted * (inCell / count);
                    curvature += gaps * inCell;
                    i = end;
                }

                if (++cell == cells)
                {
                    cell = 0;
                    turn++;
                }
            }

            // Σ gap_i (x_{i−1} + x_i)/2 over one turn, positions counted from the first.
            return (slope - 0.5 * length * length, curvature);
        }
    }
}
