using System.Runtime.CompilerServices;
using System.Runtime.Intrinsics;
using System.Runtime.Intrinsics.X86;

namespace FlowSolver.Foundation;

/// <summary>
/// Convolution of a field on a line or a rectangle of cells with a normal density, axis by axis. Walls are even mirrors, periodic axes wrap.
/// </summary>
/// <remarks>
/// A direct sum with weights above 0 (<see cref="GaussianKernel"/>): what is not negative stays so, small values keep their relative accuracy,
/// and the sum over all cells is kept to rounding. Cost: about 24 σ/h multiplications a cell and axis. Where the kernel reaches beyond the axis its mirror images (or turns) are added up
/// first, so that the cost never exceeds one full row a cell; a line alone takes a detour over wider cells, at about 90 multiplications a cell however wide the density. The result does not depend on the number of threads. Not safe for use
/// from two threads at once: it holds its working memory.
/// </remarks>
public sealed class GaussianConvolution
{
    private const int StripWidth = 32;
    private const int RowsAtOnce = 4;

    // From this radius on a line alone is convolved by way of wider cells.
    private const int WideFrom = 256;

    private readonly WideLineConvolution? wideLine;
    private readonly Pass? alongX;
    private readonly Pass? alongY;
    private readonly int countX;
    private readonly int countY;
    private readonly double[] between;
    private readonly Action<int> lineBlock;
    private readonly Action<int> rowBlock;
    private readonly Action<int> columnBlock;
    private double[] from = [];
    private double[] to = [];

    /// <summary>Prepares weights and working memory.</summary>
    /// <param name="countX">Cells along x, the fastest index; at least 1.</param>
    /// <param name="countY">Cells along y; 1 on a line.</param>
    /// <param name="periodicX">Whether x wraps (otherwise its ends are mirrors).</param>
    /// <param name="periodicY">Whether y wraps.</param>
    /// <param name="varianceX">Variance along x, in squared cell widths of x.</param>
    /// <param name="varianceY">Variance along y, in squared cell widths of y; 0 on a line.</param>
    /// <param name="threads">The most threads that <see cref="Apply"/> will be given.</param>
    /// <exception cref="ArgumentException">A count is below 1 or a variance negative; a line has a variance along y.</exception>
    public GaussianConvolution(
        int countX, int countY, bool periodicX, bool periodicY, double varianceX, double varianceY, int threads = 1)
    {
        this.countX = Require.AtLeast(countX, 1);
        this.countY = Require.AtLeast(countY, 1);
        Require.AtLeast(threads, 1);
        Require.That(countY > 1 || varianceY == 0, $"varianceY was {varianceY}; it must be 0 on a line.");
        if (countY == 1 && varianceX > 0 && Math.Sqrt(-2 * varianceX * Math.Log(GaussianKernel.Cutoff)) >= WideFrom)
            wideLine = WideLineConvolution.TryCreate(countX, periodicX, varianceX);
        var kernelX = new GaussianKernel(wideLine is null ? varianceX : 0);
        var kernelY = new GaussianKernel(varianceY);
        if (kernelX.Radius > 0)
            alongX = new Pass(kernelX, countX, periodicX, countY >= RowsAtOnce ? StripWidth : 1, threads);
        if (kernelY.Radius > 0)
            alongY = new Pass(kernelY, countY, periodicY, StripWidth, threads);
        between = alongX is not null && alongY is not null ? new double[checked(countX * countY)] : [];
        lineBlock = Line;
        rowBlock = Rows;
        columnBlock = Columns;
    }

    /// <summary>Writes the smoothed field.</summary>
    /// <param name="source">Field, x fastest; length countX·countY.</param>
    /// <param name="destination">Receives the result; of the same length; may be <paramref name="source"/> itself.</param>
    /// <param name="team">Threads to use.</param>
    public void Apply(double[] source, double[] destination, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(source);
        ArgumentNullException.ThrowIfNull(destination);
        ArgumentNullException.ThrowIfNull(team);
        Require.Length(source.Length, countX * countY);
        Require.Length(destination.Length, countX * countY);
        if (wideLine is not null && alongY is null)
        {
            wideLine.Apply(source, destination);
            return;
        }

        if (alongX is null && alongY is null)
        {
            source.AsSpan().CopyTo(destination);
            return;
        }

        (from, to) = (source, alongY is null ? destination : between);
        if (alongX is not null)
            team.Run(alongX.StripWidth == 1 ? countY : (countY + StripWidth - 1) / StripWidth, alongX.StripWidth == 1 ? lineBlock : rowBlock);
        if (alongY is not null)
        {
            (from, to) = (alongX is null ? source : between, destination);
            team.Run((countX + StripWidth - 1) / StripWidth, columnBlock);
        }

        (from, to) = ([], []);
    }

    private unsafe void Line(int row)
    {
        var pass = alongX!;
        var panel = pass.Scratch.Rent(out var slot);
        var map = pass.SourceOf;
        var line = from.AsSpan(row * countX, countX);
        for (var k = 0; k < map.Length; k++)
            panel[k] = line[map[k]];
        fixed (double* input = panel, weights = pass.Weights, output = &to[row * countX])
            ConvolveLine(input, weights, pass.Radius, output, countX);
        pass.Scratch.Return(slot);
    }

    // A strip of up to 32 rows is turned on its side, so that the pass along x runs as the pass along y does: whole vectors, no misaligned loads.
    private unsafe void Rows(int strip)
    {
        var pass = alongX!;
        var panel = pass.Scratch.Rent(out var slot);
        var first = strip * StripWidth;
        var rows = Math.Min(StripWidth, countY - first);
        var radius = pass.Radius;
        fixed (double* work = panel, weights = pass.Weights, source = &from[first * countX], target = &to[first * countX])
        {
            var body = work + radius * StripWidth;
            TransposeIn(source, countX, rows, countX, body);
            var map = pass.SourceOf;
            for (var k = 0; k < radius; k++)
            {
                CopyStrip(body + map[k] * StripWidth, work + k * StripWidth);
                CopyStrip(body + map[radius + countX + k] * StripWidth, body + (countX + k) * StripWidth);
            }

            // Each output overwrites a place of the panel that no later output reads: outputs trail the inputs by the radius.
            Convolve(work, weights, radius, work, StripWidth, StripWidth, countX);
            TransposeOut(work, countX, rows, countX, target);
        }

        pass.Scratch.Return(slot);
    }

    private unsafe void Columns(int strip)
    {
        var pass = alongY!;
        var panel = pass.Scratch.Rent(out var slot);
        var first = strip * StripWidth;
        var width = Math.Min(StripWidth, countX - first);
        var map = pass.SourceOf;
        fixed (double* work = panel, weights = pass.Weights, source = from, target = to)
        {
            for (var k = 0; k < map.Length; k++)
            {
                var line = source + (long)map[k] * countX + first;
                var place = work + k * StripWidth;
                if (width == StripWidth)
                {
                    CopyStrip(line, place);
                    continue;
                }

                for (var c = 0; c < StripWidth; c++)
                    place[c] = c < width ? line[c] : 0;
            }

            if (width == StripWidth)
            {
                Convolve(work, weights, pass.Radius, target + first, countX, StripWidth, countY);
            }
            else
            {
                Convolve(work, weights, pass.Radius, work, StripWidth, StripWidth, countY);
                for (var row = 0; row < countY; row++)
                    new Span<double>(work + row * StripWidth, width).CopyTo(new Span<double>(target + (long)row * countX + first, width));
            }
        }

        pass.Scratch.Return(slot);
    }

    /// <summary>
    /// target[row·targetStride + c] = Σ_k weights[k]·input[(row + k)·stride + c] for 32 columns c. Four rows by 32 columns are held in registers; weights carry
    /// three zeros at either end so that the four rows can share every input. May run in place on the panel itself.
    /// </summary>
    private static unsafe void Convolve(double* input, double* weights, int radius, double* target, int targetStride, int stride, int rows)
    {
        if (!Vector512.IsHardwareAccelerated)
        {
            ConvolveNarrow(input, weights, radius, target, targetStride, stride, rows);
            return;
        }

        var taps = 2 * radius + RowsAtOnce;
        for (var row = 0; row < rows; row += RowsAtOnce)
        {
            Vector512<double> a0 = default, a1 = default, a2 = default, a3 = default;
            Vector512<double> b0 = default, b1 = default, b2 = default, b3 = default;
            Vector512<double> c0 = default, c1 = default, c2 = default, c3 = default;
            Vector512<double> d0 = default, d1 = default, d2 = default, d3 = default;
            var line = input + (long)row * stride;
            // Output row j of the four takes input k with weight k − j; the first real weight stands behind three zeros.
            var weight = weights + (RowsAtOnce - 1);
            for (var k = 0; k < taps; k++)
            {
                var x0 = Vector512.Load(line);
                var x1 = Vector512.Load(line + 8);
                var x2 = Vector512.Load(line + 16);
                var x3 = Vector512.Load(line + 24);
                var w = Vector512.Create(weight[0]);
                a0 = Vector512.MultiplyAddEstimate(w, x0, a0);
                a1 = Vector512.MultiplyAddEstimate(w, x1, a1);
                a2 = Vector512.MultiplyAddEstimate(w, x2, a2);
                a3 = Vector512.MultiplyAddEstimate(w, x3, a3);
                w = Vector512.Create(weight[-1]);
                b0 = Vector512.MultiplyAddEstimate(w, x0, b0);
                b1 = Vector512.MultiplyAddEstimate(w, x1, b1);
                b2 = Vector512.MultiplyAddEstimate(w, x2, b2);
                b3 = Vector512.MultiplyAddEstimate(w, x3, b3);
                w = Vector512.Create(weight[-2]);
                c0 = Vector512.MultiplyAddEstimate(w, x0, c0);
                c1 = Vector512.MultiplyAddEstimate(w, x1, c1);
                c2 = Vector512.MultiplyAddEstimate(w, x2, c2);
                c3 = Vector512.MultiplyAddEstimate(w, x3, c3);
                w = Vector512.Create(weight[-3]);
                d0 = Vector512.MultiplyAddEstimate(w, x0, d0);
                d1 = Vector512.MultiplyAddEstimate(w, x1, d1);
                d2 = Vector512.MultiplyAddEstimate(w, x2, d2);
                d3 = Vector512.MultiplyAddEstimate(w, x3, d3);
                line += stride;
                weight++;
            }

            var output = target + (long)row * targetStride;
            var left = rows - row;
            Store(output, a0, a1, a2, a3);
            if (left > 1)
                Store(output + targetStride, b0, b1, b2, b3);
            if (left > 2)
                Store(output + 2 * (long)targetStride, c0, c1, c2, c3);
            if (left > 3)
                Store(output + 3 * (long)targetStride, d0, d1, d2, d3);
        }
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static unsafe void Store(double* place, Vector512<double> v0, Vector512<double> v1, Vector512<double> v2, Vector512<double> v3)
    {
        v0.Store(place);
        v1.Store(place + 8);
        v2.Store(place + 16);
        v3.Store(place + 24);
    }

    // The same for machines whose widest vectors hold four numbers or two: four rows by eight columns fit in sixteen registers.
    private static unsafe void ConvolveNarrow(double* input, double* weights, int radius, double* target, int targetStride, int stride, int rows)
    {
        var taps = 2 * radius + RowsAtOnce;
        for (var row = 0; row < rows; row += RowsAtOnce)
        {
            var left = rows - row;
            for (var column = 0; column < StripWidth; column += 8)
            {
                Vector256<double> a0 = default, a1 = default, b0 = default, b1 = default;
                Vector256<double> c0 = default, c1 = default, d0 = default, d1 = default;
                var line = input + (long)row * stride + column;
                var weight = weights + (RowsAtOnce - 1);
                for (var k = 0; k < taps; k++)
                {
                    var x0 = Vector256.Load(line);
                    var x1 = Vector256.Load(line + 4);
                    var w = Vector256.Create(weight[0]);
                    a0 = Vector256.MultiplyAddEstimate(w, x0, a0);
                    a1 = Vector256.MultiplyAddEstimate(w, x1, a1);
                    w = Vector256.Create(weight[-1]);
                    b0 = Vector256.MultiplyAddEstimate(w, x0, b0);
                    b1 = Vector256.MultiplyAddEstimate(w, x1, b1);
                    w = Vector256.Create(weight[-2]);
                    c0 = Vector256.MultiplyAddEstimate(w, x0, c0);
                    c1 = Vector256.MultiplyAddEstimate(w, x1, c1);
                    w = Vector256.Create(weight[-3]);
                    d0 = Vector256.MultiplyAddEstimate(w, x0, d0);
                    d1 = Vector256.MultiplyAddEstimate(w, x1, d1);
                    line += stride;
                    weight++;
                }

                var output = target + (long)row * targetStride + column;
                a0.Store(output);
                a1.Store(output + 4);
                if (left > 1)
                {
                    b0.Store(output + targetStride);
                    b1.Store(output + targetStride + 4);
                }

                if (left > 2)
                {
                    c0.Store(output + 2 * (long)targetStride);
                    c1.Store(output + 2 * (long)targetStride + 4);
                }

                if (left > 3)
                {
                    d0.Store(output + 3 * (long)targetStride);
                    d1.Store(output + 3 * (long)targetStride + 4);
                }
            }
        }
    }

    // One row alone: misaligned loads, 32 outputs in registers. Weights begin behind the same three zeros.
    private static unsafe void ConvolveLine(double* input, double* weights, int radius, double* target, int count)
    {
        weights += RowsAtOnce - 1;
        var taps = 2 * radius + 1;
        var i = 0;
        for (; i + 32 <= count; i += 32)
        {
            Vector512<double> a0 = default, a1 = default, a2 = default, a3 = default;
            var line = input + i;
            for (var k = 0; k < taps; k++)
            {
                var w = Vector512.Create(weights[k]);
                a0 = Vector512.MultiplyAddEstimate(w, Vector512.Load(line + k), a0);
                a1 = Vector512.MultiplyAddEstimate(w, Vector512.Load(line + k + 8), a1);
                a2 = Vector512.MultiplyAddEstimate(w, Vector512.Load(line + k + 16), a2);
                a3 = Vector512.MultiplyAddEstimate(w, Vector512.Load(line + k + 24), a3);
            }

            Store(target + i, a0, a1, a2, a3);
        }

        for (; i < count; i++)
        {
            var sum = 0.0;
            for (var k = 0; k < taps; k++)
                sum = Math.FusedMultiplyAdd(weights[k], input[i + k], sum);
            target[i] = sum;
        }
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static unsafe void CopyStrip(double* source, double* target)
    {
        for (var c = 0; c < StripWidth; c += 8)
            Vector512.Store(Vector512.Load(source + c), target + c);
    }

    private static unsafe void TransposeIn(double* source, int sourceStride, int rows, int columns, double* panel)
    {
        var x = 0;
        if (Avx512F.IsSupported && rows == StripWidth)
        {
            for (; x + 8 <= columns; x += 8)
            {
                for (var r = 0; r < StripWidth; r += 8)
                    Transpose8(source + (long)r * sourceStride + x, sourceStride, panel + x * StripWidth + r, StripWidth);
            }
        }

        for (; x < columns; x++)
        {
            var place = panel + x * StripWidth;
            for (var r = 0; r < StripWidth; r++)
                place[r] = r < rows ? source[(long)r * sourceStride + x] : 0;
        }
    }

    private static unsafe void TransposeOut(double* panel, int columns, int rows, int targetStride, double* target)
    {
        var x = 0;
        if (Avx512F.IsSupported && rows == StripWidth)
        {
            for (; x + 8 <= columns; x += 8)
            {
                for (var r = 0; r < StripWidth; r += 8)
                    Transpose8(panel + x * StripWidth + r, StripWidth, target + (long)r * targetStride + x, targetStride);
            }
        }

        for (; x < columns; x++)
        {
            for (var r = 0; r < rows; r++)
                target[(long)r * targetStride + x] = panel[x * StripWidth + r];
        }
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static unsafe void Transpose8(double* source, int sourceStride, double* target, int targetStride)
    {
        var r0 = Vector512.Load(source);
        var r1 = Vector512.Load(source + sourceStride);
        var r2 = Vector512.Load(source + 2 * (long)sourceStride);
        var r3 = Vector512.Load(source + 3 * (long)sourceStride);
        var r4 = Vector512.Load(source + 4 * (long)sourceStride);
        var r5 = Vector512.Load(source + 5 * (long)sourceStride);
        var r6 = Vector512.Load(source + 6 * (long)sourceStride);
        var r7 = Vector512.Load(source + 7 * (long)sourceStride);
        // Pairs of rows interleaved, then quarters of the vectors regrouped twice.
        var a0 = Avx512F.UnpackLow(r0, r1);
        var a1 = Avx512F.UnpackHigh(r0, r1);
        var a2 = Avx512F.UnpackLow(r2, r3);
        var a3 = Avx512F.UnpackHigh(r2, r3);
        var a4 = Avx512F.UnpackLow(r4, r5);
        var a5 = Avx512F.UnpackHigh(r4, r5);
        var a6 = Avx512F.UnpackLow(r6, r7);
        var a7 = Avx512F.UnpackHigh(r6, r7);
        var b0 = Avx512F.Shuffle4x128(a0, a2, 0x88);
        var b1 = Avx512F.Shuffle4x128(a1, a3, 0x88);
        var b2 = Avx512F.Shuffle4x128(a0, a2, 0xdd);
        var b3 = Avx512F.Shuffle4x128(a1, a3, 0xdd);
        var b4 = Avx512F.Shuffle4x128(a4, a6, 0x88);
        var b5 = Avx512F.Shuffle4x128(a5, a7, 0x88);
        var b6 = Avx512F.Shuffle4x128(a4, a6, 0xdd);
        var b7 = Avx512F.Shuffle4x128(a5, a7, 0xdd);
        Avx512F.Shuffle4x128(b0, b4, 0x88).Store(target);
        Avx512F.Shuffle4x128(b1, b5, 0x88).Store(target + targetStride);
        Avx512F.Shuffle4x128(b2, b6, 0x88).Store(target + 2 * (long)targetStride);
        Avx512F.Shuffle4x128(b3, b7, 0x88).Store(target + 3 * (long)targetStride);
        Avx512F.Shuffle4x128(b0, b4, 0xdd).Store(target + 4 * (long)targetStride);
        Avx512F.Shuffle4x128(b1, b5, 0xdd).Store(target + 5 * (long)targetStride);
        Avx512F.Shuffle4x128(b2, b6, 0xdd).Store(target + 6 * (long)targetStride);
        Avx512F.Shuffle4x128(b3, b7, 0xdd).Store(target + 7 * (long)targetStride);
    }

    /// <summary>Weights and working memory of one axis.</summary>
    private sealed class Pass
    {
        public Pass(GaussianKernel kernel, int count, bool periodic, int stripWidth, int threads)
        {
            StripWidth = stripWidth;
            // The extension beyond the ends repeats after this many cells; images of a kernel that reaches further are added up.
            var period = periodic ? count : 2 * count;
            var folded = Fold(kernel, period);
            Radius = folded.Length - 1;
            Weights = new double[2 * Radius + 1 + 2 * (RowsAtOnce - 1)];
            for (var n = 0; n <= Radius; n++)
                Weights[RowsAtOnce - 1 + Radius - n] = Weights[RowsAtOnce - 1 + Radius + n] = folded[n];
            SourceOf = new int[count + 2 * Radius];
            for (var k = 0; k < SourceOf.Length; k++)
            {
                var place = ((k - Radius) % period + period) % period;
                SourceOf[k] = place < count ? place : period - 1 - place;
            }

            // Rows beyond the last are read with weight 0; they are never written and stay 0.
            Scratch = new ScratchPool(threads, checked((count + 2 * Radius + RowsAtOnce) * stripWidth));
        }

        public int StripWidth { get; }

        public int Radius { get; }

        public double[] Weights { get; }

        public int[] SourceOf { get; }

        public ScratchPool Scratch { get; }

        private static double[] Fold(GaussianKernel kernel, int period)
        {
            var weights = kernel.Weights;
            if (kernel.Radius <= period / 2)
                return weights[kernel.Radius..].ToArray();
            var turned = new double[period];
            for (var k = 0; k < weights.Length; k++)
                turned[((k - kernel.Radius) % period + period) % period] += weights[k];
            var half = turned[..(period / 2 + 1)];
            if (period % 2 == 0)
                half[^1] *= 0.5;
            return half;
        }
    }
}
