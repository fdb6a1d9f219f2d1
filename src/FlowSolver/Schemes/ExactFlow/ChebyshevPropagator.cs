using System.Diagnostics.CodeAnalysis;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using System.Runtime.Intrinsics.X86;
using FlowSolver.Foundation;

namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// e^(tA)ρ by a Chebyshev expansion on [−Λ, 0]: about √(2tΛ·log(1/tolerance)) matrix products for a long time, few for a short one.
/// </summary>
/// <remarks>
/// With B = 1 + 2A/Λ and s = tΛ/2, e^(tA) = Σ c_k T_k(B), and y_k = T_k(B)ρ follows from y_(k+1) = 2By_k − y_(k−1) in two buffers. Several
/// levels k are worked on together while a band of rows is in the cache: blocks of rows first, each level a row narrower at both ends, then
/// what was left between the blocks. Every y_k of every cell is computed by the same operations in the same order whatever the schedule, so
/// that results do not depend on the number of threads.
/// </remarks>
internal sealed unsafe class ChebyshevPropagator
{
    private const int Lane = 8;
    private const int Margin = 8;
    // So many levels a pass leave memory behind arithmetic; the cache share is most of a core's second level.
    private const int MostLevels = 16;
    private const double CacheShare = 600e3;
    private readonly Generator generator;
    private readonly WorkerTeam team;
    private readonly int nx;
    private readonly int ny;
    private readonly int stride;
    private readonly int pitch;
    private readonly int vectors;
    private readonly bool periodicX;
    private readonly bool periodicY;
    private readonly int[] blockStart;
    private readonly int mostLevels;
    private readonly int chunkWidth;
    // 2B by its five diagonals as seen from the receiving cell, in rows of `stride` numbers with a margin on both sides.
    private readonly double* center;
    private readonly double* fromLeft;
    private readonly double* fromRight;
    private readonly double* fromBelow;
    private readonly double* fromAbove;
    private readonly double* even;
    private readonly double* odd;
    private readonly double* sum;
    // Keeps the memory behind the pointers.
    private readonly double[] memory;
    private readonly double[] rowBound;
    private readonly Action<int> boundRow;
    private readonly Action<int> fillRow;
    private readonly Action<int> copyIn;
    private readonly Action<int> firstProduct;
    private readonly Action<int> blockLevels;
    private readonly Action<int> seamLevels;
    private readonly Action<int> copyOut;
    private double[] coefficients = [];
    private double[] density = [];
    private double rateCap;
    private double bound;
    private int level;
    private int lastOrder;
    private int levels;

    public ChebyshevPropagator(Generator generator, WorkerTeam team)
    {
        this.generator = generator;
        this.team = team;
        var grid = generator.Grid;
        (nx, ny) = (grid.Nx, grid.Ny);
        periodicX = grid.X.IsPeriodic;
        periodicY = grid.Y is { IsPeriodic: true };
        vectors = (nx + Lane - 1) / Lane;
        stride = vectors * Lane + 2 * Margin;
        // Rows in the cache at once: one a level and two more. Wide rows are cut along x, each level a vector further to the left, so that all levels
        // fit; across the seam of a periodic axis that does not work, and fewer levels must do.
        var rowsThatFit = (int)(CacheShare / (8.0 * sizeof(double) * stride));
        mostLevels = Math.Clamp(Math.Min(periodicX ? rowsThatFit - 2 : MostLevels, ny / 4), 1, MostLevels);
        var chunk = (int)(CacheShare / (8.0 * sizeof(double) * (mostLevels + 2))) - Lane * mostLevels;
        chunkWidth = periodicX || vectors * Lane <= chunk + chunk / 4 ? vectors * Lane : chunk / Lane * Lane;
        var blocks = Math.Max(1, Math.Max(Math.Min(4, ny / (4 * mostLevels)), ny / 192));
        blockStart = new int[blocks + 1];
        for (var b = 0; b <= blocks; b++)
            blockStart[b] = (int)((long)ny * b / blocks);
        // The eight arrays alternate row by row, so that a band of rows is one stretch of memory and fits a cache of few ways.
        pitch = 8 * stride;
        memory = GC.AllocateArray<double>(checked(pitch * ny + Lane), pinned: true);
        var origin = (double*)((Marshal.UnsafeAddrOfPinnedArrayElement(memory, 0) + 63) & ~(nint)63);
        double* Part(int index) => origin + (long)index * stride + Margin;
        center = Part(0);
        fromLeft = Part(1);
        fromRight = Part(2);
        fromBelow = Part(3);
        fromAbove = Part(4);
        even = Part(5);
        odd = Part(6);
        sum = Part(7);
        rowBound = new double[ny];
        boundRow = BoundRow;
        fillRow = FillRow;
        copyIn = CopyIn;
        firstProduct = FirstProduct;
        blockLevels = BlockLevels;
        seamLevels = SeamLevels;
        copyOut = CopyOut;
    }

    /// <summary>
    /// Takes over the generator's rates. Where the larger rate of an edge is above <paramref name="cap"/> both its rates are scaled down to it:
    /// equilibrium and detailed balance stay exact, and Λ stays moderate.
    /// </summary>
    public void SetRates(double cap)
    {
        rateCap = cap;
        team.Run(ny, boundRow);
        bound = 0;
        foreach (var row in rowBound)
            bound = Math.Max(bound, row * (1 + 1e-12));
        team.Run(ny, fillRow);
    }

    // Gershgorin's circles of the symmetric form: exits and couplings.
    private void BoundRow(int row)
    {
        var largest = 0.0;
        for (var i = 0; i < nx; i++)
        {
            var (exit, inLeft, outLeft, inRight, outRight, inBelow, outBelow, inAbove, outAbove) = RatesAt(row, i);
            largest = Math.Max(largest, exit + Math.Sqrt(inLeft) * Math.Sqrt(outLeft) + Math.Sqrt(inRight) * Math.Sqrt(outRight)
                + Math.Sqrt(inBelow) * Math.Sqrt(outBelow) + Math.Sqrt(inAbove) * Math.Sqrt(outAbove));
        }

        rowBound[row] = largest;
    }

    private void FillRow(int row)
    {
        var factor = 4 / bound;
        for (var i = 0; i < nx; i++)
        {
            var at = (long)row * pitch + i;
            var (exit, inLeft, _, inRight, _, inBelow, _, inAbove, _) = RatesAt(row, i);
            center[at] = 2 - factor * exit;
            fromLeft[at] = factor * inLeft;
            fromRight[at] = factor * inRight;
            fromBelow[at] = factor * inBelow;
            fromAbove[at] = factor * inAbove;
        }
    }

    private (double Exit, double InLeft, double OutLeft, double InRight, double OutRight, double InBelow, double OutBelow, double InAbove, double OutAbove)
        RatesAt(int row, int i)
    {
        var cell = row * nx + i;
        var leftCell = i == 0 ? cell + nx - 1 : cell - 1;
        var rightCell = i == nx - 1 ? cell - nx + 1 : cell + 1;
        var (outRight, inRight) = Capped(generator.RateRight[cell], generator.RateLeft[rightCell]);
        var (inLeft, outLeft) = Capped(generator.RateRight[leftCell], generator.RateLeft[cell]);
        if (generator.RateUp.Length == 0)
            return (outRight + outLeft, inLeft, outLeft, inRight, outRight, 0, 0, 0, 0);
        var belowCell = row == 0 ? cell + (ny - 1) * nx : cell - nx;
        var aboveCell = row == ny - 1 ? cell - (ny - 1) * nx : cell + nx;
        var (outAbove, inAbove) = Capped(generator.RateUp[cell], generator.RateDown[aboveCell]);
        var (inBelow, outBelow) = Capped(generator.RateUp[belowCell], generator.RateDown[cell]);
        return (outRight + outLeft + outAbove + outBelow, inLeft, outLeft, inRight, outRight, inBelow, outBelow, inAbove, outAbove);
    }

    private (double Forward, double Back) Capped(double forward, double back)
    {
        var larger = Math.Max(forward, back);
        return larger <= rateCap ? (forward, back) : (forward * (rateCap / larger), back * (rateCap / larger));
    }

    /// <summary>Number of products that a step would take, near enough for a choice.</summary>
    public double ProductsFor(double time, double tolerance, double drift)
    {
        var s = 0.5 * time * bound;
        var log = Math.Log(1 / tolerance);
        return 1 + Math.Min(Math.Sqrt(2 * s * (log + drift)) + Math.Sqrt(2 * s * drift) + 0.4 * log, 1.5 * s + log);
    }

    /// <summary>density ← e^(time·A) density.</summary>
    /// <param name="state">The density, x fastest.</param>
    /// <param name="time">t, above 0.</param>
    /// <param name="tolerance">Bound on what the expansion leaves out, in the norm in which ρ is measured.</param>
    /// <param name="drift">q: the norm's weight may grow so steeply that |e^(tA)| reaches e^q in it; 0 for the norm weighted by 1/π.</param>
    /// <returns>The number of matrix products.</returns>
    public int Advance(double[] state, double time, double tolerance, double drift)
    {
        var s = 0.5 * time * bound;
        var growth = s > 0 ? Math.Sqrt(2 * drift / s) : 0;
        var count = Chebyshev.ExponentialCoefficients(s, tolerance, growth, ref coefficients);
        density = state;
        team.Run(blockStart.Length - 1, copyIn);
        if (count == 1)
            return 0;
        team.Run(blockStart.Length - 1, firstProduct);
        lastOrder = count - 1;
        for (level = 1; level < count - 1; level += levels)
        {
            levels = Math.Min(mostLevels, count - 1 - level);
            team.Run(blockStart.Length - 1, blockLevels);
            if (levels > 1 && (periodicY || blockStart.Length > 2))
                team.Run(blockStart.Length - 1, seamLevels);
        }

        team.Run(blockStart.Length - 1, copyOut);
        return count - 1;
    }

    private void CopyIn(int block)
    {
        for (var row = blockStart[block]; row < blockStart[block + 1]; row++)
        {
            density.AsSpan(row * nx, nx).CopyTo(new Span<double>(even + (long)row * pitch, nx));
            CloseRow(even + (long)row * pitch);
        }
    }

    private void CopyOut(int block)
    {
        for (var row = blockStart[block]; row < blockStart[block + 1]; row++)
            new Span<double>(sum + (long)row * pitch, nx).CopyTo(density.AsSpan(row * nx, nx));
    }

    // y_1 = By_0, and the sum begins with c_0 y_0 + c_1 y_1.
    private void FirstProduct(int block)
    {
        for (var row = blockStart[block]; row < blockStart[block + 1]; row++)
        {
            var at = (long)row * pitch;
            var next = odd + at;
            new Span<double>(next - Margin, stride).Clear();
            Product(row, next, even, 0, 0, 0, vectors * Lane, next);
            var here = even + at;
            for (var i = 0; i < nx; i++)
            {
                next[i] *= 0.5;
                sum[at + i] = coefficients[0] * here[i] + coefficients[1] * next[i];
            }

            new Span<double>(sum + at + nx, vectors * Lane - nx).Clear();

            CloseRow(next);
        }
    }

    // Level k of the round is a row narrower than level k − 1 at each end that another block adjoins; rows are taken so that level k follows
    // one row behind level k − 1, and at most a row a level is in use at once.
    private void BlockLevels(int block)
    {
        var from = blockStart[block];
        var to = blockStart[block + 1];
        var shrinkLow = from > 0 || periodicY ? 1 : 0;
        var shrinkHigh = to < ny || periodicY ? 1 : 0;
        for (var chunk = 0; chunk < vectors * Lane; chunk += chunkWidth)
        {
            for (var front = from; front < to + levels - 1; front++)
            {
                for (var k = 1; k <= levels; k++)
                {
                    var row = front - (k - 1);
                    if (row >= from + shrinkLow * (k - 1) && row < to - shrinkHigh * (k - 1))
                        NextLevel(row, k, chunk, Math.Min(front + 1, to - 1));
                }
            }
        }
    }

    // What the blocks left out around the row where block begins, in the same order: each level one row behind the one before.
    private void SeamLevels(int block)
    {
        if (block == 0 && !periodicY)
            return;
        var seam = blockStart[block];
        for (var chunk = 0; chunk < vectors * Lane; chunk += chunkWidth)
        {
            for (var front = seam; front < seam + 2 * (levels - 1); front++)
            {
                for (var k = 2; k <= levels; k++)
                {
                    var row = front - (k - 1);
                    if (row >= seam - (k - 1) && row < seam + (k - 1))
                        NextLevel(row < 0 ? row + ny : row, k, chunk, Math.Min(front, ny - 1));
                }
            }
        }
    }

    // Level k of the round in one row, for the chunk of columns shifted to the left by a vector a level. On the way one of the eight arrays of
    // the row that comes next is fetched from memory, so that the first level there need not wait for it.
    private void NextLevel(int row, int k, int chunk, int nextRow)
    {
        var end = vectors * Lane;
        var from = chunk == 0 ? 0 : chunk - Lane * (k - 1);
        var to = chunk + chunkWidth >= end ? end : chunk + chunkWidth - Lane * (k - 1);
        var order = level + k;
        var target = (order & 1) == 0 ? even : odd;
        var source = (order & 1) == 0 ? odd : even;
        var next = target + (long)row * pitch;
        var ahead = center + (long)nextRow * pitch + ((k - 1) & 7) * stride;
        // The sum takes two levels at a time, which halves its traffic; the last one alone when their number is even.
        if ((order & 1) == 1)
            Product(row, next, source, coefficients[order - 1], coefficients[order], from, to, ahead);
        else if (order == lastOrder)
            Product(row, next, source, 0, coefficients[order], from, to, ahead);
        else
            Product(row, next, source, 0, 0, from, to, ahead);
        CloseRow(next);
    }

    private void CloseRow(double* row)
    {
        if (!periodicX)
            return;
        row[-1] = row[nx - 1];
        row[nx] = row[0];
    }

    // next ← 2B·here − next, sum ← sum + weightHere·here + weightNext·next, for one row.
    private void Product(int row, double* next, double* source, double weightHere, double weightNext, int from, int to, double* ahead)
    {
        var at = (long)row * pitch;
        var here = source + at;
        var total = weightNext == 0 ? null : sum + at;
        if (ny == 1)
        {
            LineProduct(next, here, total, weightHere, weightNext, from, to);
            return;
        }

        var below = row > 0 ? here - pitch : periodicY ? source + (long)(ny - 1) * pitch : here;
        var above = row < ny - 1 ? here + pitch : periodicY ? source : here;
        if (Avx512F.IsSupported)
            WideProduct(next, here, below, above, total, at, weightHere, weightNext, from, to, ahead);
        else
            NarrowProduct(next, here, below, above, total, at, weightHere, weightNext, from, to);
    }

    // The neighbours along the row are cut from the vectors before, at and after it: loads that straddle cache lines cost twice.
    private void WideProduct(
        double* next, double* here, double* below, double* above, double* total, long at, double weightHere, double weightNext, int from, int to,
        double* ahead)
    {
        var c = center + at;
        var l = fromLeft + at;
        var r = fromRight + at;
        var b = fromBelow + at;
        var a = fromAbove + at;
        var scaleHere = Vector512.Create(weightHere);
        var scaleNext = Vector512.Create(weightNext);
        var before = Vector512.LoadAligned(here + from - Lane);
        var middle = Vector512.LoadAligned(here + from);
        for (var i = from; i < to; i += Lane)
        {
            Sse.Prefetch1(ahead + i);
            var after = Vector512.LoadAligned(here + i + Lane);
            var value = Avx512F.FusedMultiplyAdd(Vector512.LoadAligned(c + i), middle, -Vector512.LoadAligned(next + i));
            value = Avx512F.FusedMultiplyAdd(Vector512.LoadAligned(l + i), Shifted(middle, before, 7), value);
            value = Avx512F.FusedMultiplyAdd(Vector512.LoadAligned(r + i), Shifted(after, middle, 1), value);
            value = Avx512F.FusedMultiplyAdd(Vector512.LoadAligned(b + i), Vector512.LoadAligned(below + i), value);
            value = Avx512F.FusedMultiplyAdd(Vector512.LoadAligned(a + i), Vector512.LoadAligned(above + i), value);
            value.StoreAligned(next + i);
            if (total != null)
            {
                var added = Avx512F.FusedMultiplyAdd(scaleHere, middle, Vector512.LoadAligned(total + i));
                Avx512F.FusedMultiplyAdd(scaleNext, value, added).StoreAligned(total + i);
            }

            before = middle;
            middle = after;
        }
    }

    private static Vector512<double> Shifted(Vector512<double> high, Vector512<double> low, [ConstantExpected] byte lanes)
        => Avx512F.AlignRight64(high.AsInt64(), low.AsInt64(), lanes).AsDouble();

    private void NarrowProduct(
        double* next, double* here, double* below, double* above, double* total, long at, double weightHere, double weightNext, int from, int to)
    {
        var c = center + at;
        var l = fromLeft + at;
        var r = fromRight + at;
        var b = fromBelow + at;
        var a = fromAbove + at;
        var scaleHere = Vector256.Create(weightHere);
        var scaleNext = Vector256.Create(weightNext);
        for (var i = from; i < to; i += 4)
        {
            var middle = Vector256.Load(here + i);
            var value = Vector256.FusedMultiplyAdd(Vector256.Load(c + i), middle, -Vector256.Load(next + i));
            value = Vector256.FusedMultiplyAdd(Vector256.Load(l + i), Vector256.Load(here + i - 1), value);
            value = Vector256.FusedMultiplyAdd(Vector256.Load(r + i), Vector256.Load(here + i + 1), value);
            value = Vector256.FusedMultiplyAdd(Vector256.Load(b + i), Vector256.Load(below + i), value);
            value = Vector256.FusedMultiplyAdd(Vector256.Load(a + i), Vector256.Load(above + i), value);
            value.Store(next + i);
            if (total != null)
                Vector256.FusedMultiplyAdd(scaleNext, value, Vector256.FusedMultiplyAdd(scaleHere, middle, Vector256.Load(total + i))).Store(total + i);
        }
    }

    private void LineProduct(double* next, double* here, double* total, double weightHere, double weightNext, int from, int to)
    {
        var scaleHere = Vector256.Create(weightHere);
        var scaleNext = Vector256.Create(weightNext);
        for (var i = from; i < to; i += 4)
        {
            var middle = Vector256.Load(here + i);
            var value = Vector256.FusedMultiplyAdd(Vector256.Load(center + i), middle, -Vector256.Load(next + i));
            value = Vector256.FusedMultiplyAdd(Vector256.Load(fromLeft + i), Vector256.Load(here + i - 1), value);
            value = Vector256.FusedMultiplyAdd(Vector256.Load(fromRight + i), Vector256.Load(here + i + 1), value);
            value.Store(next + i);
            if (total != null)
                Vector256.FusedMultiplyAdd(scaleNext, value, Vector256.FusedMultiplyAdd(scaleHere, middle, Vector256.Load(total + i))).Store(total + i);
        }
    }
}
