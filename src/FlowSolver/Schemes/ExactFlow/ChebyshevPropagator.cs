using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
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
    private readonly Generator generator;
    private readonly WorkerTeam team;
    private readonly int nx;
    private readonly int ny;
    private readonly int stride;
    private readonly int vectors;
    private readonly bool periodicX;
    private readonly bool periodicY;
    private readonly int[] blockStart;
    private readonly int mostLevels;
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
    private readonly Action<int> copyIn;
    private readonly Action<int> firstProduct;
    private readonly Action<int> blockLevels;
    private readonly Action<int> seamLevels;
    private readonly Action<int> copyOut;
    private double[] coefficients = [];
    private double[] density = [];
    private double bound;
    private int level;
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
        // Rows in the cache at once: one a level and two more, of eight arrays, within about 0.7 MB.
        var fitting = (int)(700e3 / (8.0 * sizeof(double) * stride)) - 2;
        mostLevels = Math.Clamp(Math.Min(fitting, ny / 4), 1, 8);
        var blocks = Math.Max(1, ny / (4 * mostLevels));
        blockStart = new int[blocks + 1];
        for (var b = 0; b <= blocks; b++)
            blockStart[b] = (int)((long)ny * b / blocks);
        var size = stride * ny + Lane;
        memory = GC.AllocateArray<double>(checked(8 * size + Lane), pinned: true);
        var origin = (double*)((Marshal.UnsafeAddrOfPinnedArrayElement(memory, 0) + 63) & ~(nint)63);
        double* Part(int index) => origin + (long)index * size + Margin;
        center = Part(0);
        fromLeft = Part(1);
        fromRight = Part(2);
        fromBelow = Part(3);
        fromAbove = Part(4);
        even = Part(5);
        odd = Part(6);
        sum = Part(7);
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
        var right = generator.RateRight;
        var left = generator.RateLeft;
        var up = generator.RateUp;
        var down = generator.RateDown;
        bound = 0;
        for (var pass = 0; pass < 2; pass++)
        {
            var factor = pass == 0 ? 0 : 4 / bound;
            for (var row = 0; row < ny; row++)
            {
                for (var i = 0; i < nx; i++)
                {
                    var cell = row * nx + i;
                    var at = (long)row * stride + i;
                    var leftCell = i == 0 ? cell + nx - 1 : cell - 1;
                    var rightCell = i == nx - 1 ? cell - nx + 1 : cell + 1;
                    var (outRight, inRight) = Capped(right[cell], left[rightCell], cap);
                    var (inLeft, outLeft) = Capped(right[leftCell], left[cell], cap);
                    var exit = outRight + outLeft;
                    var coupling = Math.Sqrt(outRight) * Math.Sqrt(inRight) + Math.Sqrt(inLeft) * Math.Sqrt(outLeft);
                    if (pass == 1)
                        (fromLeft[at], fromRight[at]) = (factor * inLeft, factor * inRight);
                    if (up.Length > 0)
                    {
                        var belowCell = row == 0 ? cell + (ny - 1) * nx : cell - nx;
                        var aboveCell = row == ny - 1 ? cell - (ny - 1) * nx : cell + nx;
                        var (outUp, inAbove) = Capped(up[cell], down[aboveCell], cap);
                        var (inBelow, outDown) = Capped(up[belowCell], down[cell], cap);
                        exit += outUp + outDown;
                        coupling += Math.Sqrt(outUp) * Math.Sqrt(inAbove) + Math.Sqrt(inBelow) * Math.Sqrt(outDown);
                        if (pass == 1)
                            (fromBelow[at], fromAbove[at]) = (factor * inBelow, factor * inAbove);
                    }

                    if (pass == 0)
                        bound = Math.Max(bound, (exit + coupling) * (1 + 1e-12));
                    else
                        center[at] = 2 - factor * exit;
                }
            }
        }
    }

    private static (double, double) Capped(double forward, double back, double cap)
    {
        var larger = Math.Max(forward, back);
        return larger <= cap ? (forward, back) : (forward * (cap / larger), back * (cap / larger));
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
            density.AsSpan(row * nx, nx).CopyTo(new Span<double>(even + (long)row * stride, nx));
            CloseRow(even + (long)row * stride);
        }
    }

    private void CopyOut(int block)
    {
        for (var row = blockStart[block]; row < blockStart[block + 1]; row++)
            new Span<double>(sum + (long)row * stride, nx).CopyTo(density.AsSpan(row * nx, nx));
    }

    // y_1 = By_0, and the sum begins with c_0 y_0 + c_1 y_1.
    private void FirstProduct(int block)
    {
        for (var row = blockStart[block]; row < blockStart[block + 1]; row++)
        {
            var at = (long)row * stride;
            var next = odd + at;
            new Span<double>(next - Margin, stride).Clear();
            new Span<double>(sum + at, vectors * Lane).Clear();
            Product(row, next, even, 0);
            var here = even + at;
            for (var i = 0; i < nx; i++)
            {
                next[i] *= 0.5;
                sum[at + i] = coefficients[0] * here[i] + coefficients[1] * next[i];
            }

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
        for (var front = from; front < to + levels - 1; front++)
        {
            for (var k = 1; k <= levels; k++)
            {
                var row = front - (k - 1);
                if (row >= from + shrinkLow * (k - 1) && row < to - shrinkHigh * (k - 1))
                    NextLevel(row, level + k);
            }
        }
    }

    // What the blocks left out around the row where block begins.
    private void SeamLevels(int block)
    {
        if (block == 0 && !periodicY)
            return;
        var seam = blockStart[block];
        for (var k = 2; k <= levels; k++)
        {
            for (var row = seam - (k - 1); row < seam + (k - 1); row++)
                NextLevel(row < 0 ? row + ny : row, level + k);
        }
    }

    private void NextLevel(int row, int order)
    {
        var target = (order & 1) == 0 ? even : odd;
        var source = (order & 1) == 0 ? odd : even;
        var next = target + (long)row * stride;
        Product(row, next, source, coefficients[order]);
        CloseRow(next);
    }

    private void CloseRow(double* row)
    {
        if (!periodicX)
            return;
        row[-1] = row[nx - 1];
        row[nx] = row[0];
    }

    // next ← 2B·here − next, sum ← sum + weight·next, for one row.
    private void Product(int row, double* next, double* source, double weight)
    {
        var at = (long)row * stride;
        var here = source + at;
        if (ny == 1)
        {
            LineProduct(next, here, weight);
            return;
        }

        var below = row > 0 ? here - stride : periodicY ? source + (long)(ny - 1) * stride : here;
        var above = row < ny - 1 ? here + stride : periodicY ? source : here;
        var c = center + at;
        var l = fromLeft + at;
        var r = fromRight + at;
        var b = fromBelow + at;
        var a = fromAbove + at;
        var total = sum + at;
        var end = vectors * Lane;
        if (Vector512.IsHardwareAccelerated)
        {
            var factor = Vector512.Create(weight);
            for (var i = 0; i < end; i += 8)
            {
                var value = Vector512.MultiplyAddEstimate(Vector512.Load(c + i), Vector512.Load(here + i), -Vector512.Load(next + i));
                value = Vector512.MultiplyAddEstimate(Vector512.Load(l + i), Vector512.Load(here + i - 1), value);
                value = Vector512.MultiplyAddEstimate(Vector512.Load(r + i), Vector512.Load(here + i + 1), value);
                value = Vector512.MultiplyAddEstimate(Vector512.Load(b + i), Vector512.Load(below + i), value);
                value = Vector512.MultiplyAddEstimate(Vector512.Load(a + i), Vector512.Load(above + i), value);
                value.Store(next + i);
                Vector512.MultiplyAddEstimate(factor, value, Vector512.Load(total + i)).Store(total + i);
            }

            return;
        }

        var scale = Vector256.Create(weight);
        for (var i = 0; i < end; i += 4)
        {
            var value = Vector256.MultiplyAddEstimate(Vector256.Load(c + i), Vector256.Load(here + i), -Vector256.Load(next + i));
            value = Vector256.MultiplyAddEstimate(Vector256.Load(l + i), Vector256.Load(here + i - 1), value);
            value = Vector256.MultiplyAddEstimate(Vector256.Load(r + i), Vector256.Load(here + i + 1), value);
            value = Vector256.MultiplyAddEstimate(Vector256.Load(b + i), Vector256.Load(below + i), value);
            value = Vector256.MultiplyAddEstimate(Vector256.Load(a + i), Vector256.Load(above + i), value);
            value.Store(next + i);
            Vector256.MultiplyAddEstimate(scale, value, Vector256.Load(total + i)).Store(total + i);
        }
    }

    private void LineProduct(double* next, double* here, double weight)
    {
        var factor = Vector512.Create(weight);
        for (var i = 0; i < vectors * Lane; i += 8)
        {
            var value = Vector512.MultiplyAddEstimate(Vector512.Load(center + i), Vector512.Load(here + i), -Vector512.Load(next + i));
            value = Vector512.MultiplyAddEstimate(Vector512.Load(fromLeft + i), Vector512.Load(here + i - 1), value);
            value = Vector512.MultiplyAddEstimate(Vector512.Load(fromRight + i), Vector512.Load(here + i + 1), value);
            value.Store(next + i);
            Vector512.MultiplyAddEstimate(factor, value, Vector512.Load(sum + i)).Store(sum + i);
        }
    }
}
