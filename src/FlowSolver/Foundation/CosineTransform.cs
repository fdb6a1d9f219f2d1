using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// The real transform that diagonalises constant-coefficient differences on a cell-centred rectangle, and solves with it: cosine (DCT-II) along an
/// axis with walls, Hartley along a periodic one. Any number of cells; products of 2, 3 and 5 are fast.
/// </summary>
/// <remarks>
/// With walls, coefficient k of a line is Σᵢ fᵢ cos(πk(i+½)/n); on a circle Σᵢ fᵢ (cos(2πki/n) + sin(2πki/n)). The second difference multiplies
/// coefficient k by −<see cref="EigenvalueX"/>. The cosine transform goes through a complex transform of the same length by reordering (J.
/// Makhoul, IEEE Trans. Acoust. Speech Signal Process. 28 (1980) 27-34), sixteen lines at once: eight as real parts, eight as imaginary parts.
/// The Hartley transform is R. Bracewell's (J. Opt. Soc. Am. 73 (1983) 1832-1835). Owns its memory, allocates nothing in a call; results do not depend on the team's size.
/// </remarks>
public sealed class CosineTransform
{
    private const int Lines = 16;
    private readonly WorkerTeam team;
    private readonly LineTransform alongX;
    private readonly LineTransform alongY;
    private readonly int rowBlocks;
    private readonly int columnBlocks;
    private readonly double[][] buffers;
    private readonly Action<int> rowsForward;
    private readonly Action<int> rowsBackward;
    private readonly Action<int> columnsForward;
    private readonly Action<int> columnsBackward;
    private readonly Action<int> columnsSolve;
    private double[] field = [];
    private double weightX;
    private double weightY;
    private double shift;

    /// <summary>Prepares transforms of fields of <paramref name="nx"/> × <paramref name="ny"/> cells, x fastest.</summary>
    /// <param name="nx">Cells along x.</param>
    /// <param name="ny">Cells along y; 1 for a line.</param>
    /// <param name="periodicX">Whether x is a circle.</param>
    /// <param name="periodicY">Whether y is a circle.</param>
    /// <param name="team">Threads to use.</param>
    public CosineTransform(int nx, int ny, bool periodicX, bool periodicY, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(team);
        Nx = Require.AtLeast(nx, 1);
        Ny = Require.AtLeast(ny, 1);
        this.team = team;
        alongX = new LineTransform(nx, periodicX);
        alongY = new LineTransform(ny, periodicY);
        rowBlocks = (ny + Lines - 1) / Lines;
        columnBlocks = (nx + Lines - 1) / Lines;
        buffers = new double[Math.Max(rowBlocks, columnBlocks)][];
        for (var i = 0; i < buffers.Length; i++)
            buffers[i] = GC.AllocateArray<double>(2 * Lines * Math.Max(nx, ny) + 16, pinned: true);
        rowsForward = block => Rows(block, forward: true);
        rowsBackward = block => Rows(block, forward: false);
        columnsForward = block => Columns(block, forward: true);
        columnsBackward = block => Columns(block, forward: false);
        columnsSolve = SolveColumns;
    }

    /// <summary>Cells along x.</summary>
    public int Nx { get; }

    /// <summary>Cells along y.</summary>
    public int Ny { get; }

    /// <summary>Eigenvalue of minus the second difference (unit width) along x for coefficient <paramref name="k"/>; not below 0.</summary>
    public double EigenvalueX(int k) => alongX.Eigenvalue(k);

    /// <summary>Eigenvalue of minus the second difference (unit width) along y for coefficient <paramref name="k"/>; not below 0.</summary>
    public double EigenvalueY(int k) => alongY.Eigenvalue(k);

    /// <summary>Replaces values by coefficients, in place.</summary>
    /// <exception cref="ArgumentException">The length is not Nx·Ny.</exception>
    public void Forward(double[] values) => Both(values, rowsForward, columnsForward);

    /// <summary>Replaces coefficients by values, in place: the inverse of <see cref="Forward"/>.</summary>
    /// <exception cref="ArgumentException">The length is not Nx·Ny.</exception>
    public void Inverse(double[] coefficients) => Both(coefficients, rowsBackward, columnsBackward);

    /// <summary>
    /// Solves shift·u − weightX·δ²ₓu − weightY·δ²ᵧu = f in place, δ² being the second difference without the cell width (a difference quotient has
    /// weight 1/h²). Where the operator is singular (shift 0) the mean of f is dropped and that of u is 0.
    /// </summary>
    /// <param name="values">f on entry, u on return; length Nx·Ny.</param>
    /// <param name="weightX">Weight along x, not below 0.</param>
    /// <param name="weightY">Weight along y, not below 0.</param>
    /// <param name="shift">Not below 0.</param>
    public void Solve(double[] values, double weightX, double weightY, double shift = 0)
    {
        ArgumentNullException.ThrowIfNull(values);
        Require.Length(values.Length, Nx * Ny);
        this.weightX = Require.NotNegative(weightX);
        this.weightY = Require.NotNegative(weightY);
        this.shift = Require.NotNegative(shift);
        field = values;
        team.Run(rowBlocks, rowsForward);
        team.Run(columnBlocks, columnsSolve);
        team.Run(rowBlocks, rowsBackward);
        field = [];
    }

    private void Both(double[] values, Action<int> rows, Action<int> columns)
    {
        ArgumentNullException.ThrowIfNull(values);
        Require.Length(values.Length, Nx * Ny);
        field = values;
        team.Run(rowBlocks, rows);
        if (Ny > 1)
            team.Run(columnBlocks, columns);
        field = [];
    }

    private void Rows(int block, bool forward)
    {
        var buffer = buffers[block].AsSpan();
        var first = block * Lines;
        var count = Math.Min(Lines, Ny - first);
        var strip = buffer[..(Nx * Lines)];
        if (count < Lines)
            strip.Clear();
        // Eight columns at a time, one cache line of every row: rows a power of two apart would push each other out of the cache otherwise.
        for (var i = 0; i < Nx; i += 8)
        {
            var width = Math.Min(8, Nx - i);
            for (var r = 0; r < count; r++)
            {
                var line = field.AsSpan((first + r) * Nx + i, width);
                for (var c = 0; c < line.Length; c++)
                    strip[(i + c) * Lines + r] = line[c];
            }
        }

        alongX.Apply(buffer, forward);
        for (var i = 0; i < Nx; i += 8)
        {
            var width = Math.Min(8, Nx - i);
            for (var r = 0; r < count; r++)
            {
                var line = field.AsSpan((first + r) * Nx + i, width);
                for (var c = 0; c < line.Length; c++)
                    line[c] = strip[(i + c) * Lines + r];
            }
        }
    }

    private void Columns(int block, bool forward)
    {
        var buffer = buffers[block].AsSpan();
        ReadColumns(block, buffer);
        alongY.Apply(buffer, forward);
        WriteColumns(block, buffer);
    }

    private void SolveColumns(int block)
    {
        var buffer = buffers[block].AsSpan();
        ReadColumns(block, buffer);
        if (Ny > 1)
            alongY.Apply(buffer, forward: true);
        Span<double> eigenvalues = stackalloc double[Lines];
        var first = block * Lines;
        for (var c = 0; c < Lines; c++)
            eigenvalues[c] = first + c < Nx ? shift + weightX * alongX.Eigenvalue(first + c) : 1;
        for (var row = 0; row < Ny; row++)
        {
            var line = buffer.Slice(row * Lines, Lines);
            var alongRow = weightY * alongY.Eigenvalue(row);
            for (var c = 0; c < Lines; c++)
            {
                var eigenvalue = eigenvalues[c] + alongRow;
                line[c] = eigenvalue > 0 ? line[c] / eigenvalue : 0;
            }
        }

        if (Ny > 1)
            alongY.Apply(buffer, forward: false);
        WriteColumns(block, buffer);
    }

    private void ReadColumns(int block, Span<double> buffer)
    {
        var first = block * Lines;
        var count = Math.Min(Lines, Nx - first);
        if (count < Lines)
            buffer[..(Ny * Lines)].Clear();
        for (var row = 0; row < Ny; row++)
            field.AsSpan(row * Nx + first, count).CopyTo(buffer.Slice(row * Lines, Lines));
    }

    private void WriteColumns(int block, ReadOnlySpan<double> buffer)
    {
        var first = block * Lines;
        var count = Math.Min(Lines, Nx - first);
        for (var row = 0; row < Ny; row++)
            buffer.Slice(row * Lines, count).CopyTo(field.AsSpan(row * Nx + first, count));
    }
}

/// <summary>Cosine or Hartley transform of sixteen lines at once: element i of all lines stands at 16i … 16i+15. Immutable.</summary>
internal sealed class LineTransform
{
    private const int Lines = 16;
    private readonly int count;
    private readonly bool periodic;
    private readonly Stage[] stages;
    private readonly double[] cosines;
    private readonly double[] sines;
    private readonly double[] eigenvalues;

    public LineTransform(int count, bool periodic)
    {
        this.count = count;
        this.periodic = periodic;
        cosines = new double[count];
        sines = new double[count];
        eigenvalues = new double[count];
        for (var k = 0; k < count; k++)
        {
            (sines[k], cosines[k]) = Math.SinCos(Math.PI * k / (2.0 * count));
            var half = Math.Sin(periodic ? Math.PI * k / count : Math.PI * k / (2.0 * count));
            eigenvalues[k] = 4 * half * half;
        }

        eigenvalues[0] = 0;
        var list = new List<Stage>();
        for (int length = count, stride = 1; length > 1;)
        {
            var radix = length % 4 == 0 ? 4 : length % 2 == 0 ? 2 : length % 3 == 0 ? 3 : length % 5 == 0 ? 5 : SmallestFactor(length);
            list.Add(new Stage(radix, length, stride));
            length /= radix;
            stride *= radix;
        }

        stages = [.. list];
    }

    public double Eigenvalue(int k) => eigenvalues[k];

    /// <summary>Transforms the first count·16 elements of the buffer in place; the rest of its 2·count·16 elements is working room.</summary>
    public void Apply(Span<double> buffer, bool forward)
    {
        if (count == 1)
            return;
        var a = MemoryMarshal.Cast<double, Vector512<double>>(buffer[..(count * Lines)]);
        var b = MemoryMarshal.Cast<double, Vector512<double>>(buffer.Slice(count * Lines, count * Lines));
        if (periodic)
            Hartley(a, b, forward ? 1 : 1.0 / count);
        else if (forward)
            Cosine(a, b);
        else
            CosineInverse(a, b);
    }

    private static int SmallestFactor(int length)
    {
        for (var factor = 7; factor * factor <= length; factor += 2)
        {
            if (length % factor == 0)
                return factor;
        }

        return length;
    }

    private void Hartley(Span<Vector512<double>> a, Span<Vector512<double>> b, double scale)
    {
        var z = Fourier(a, b);
        var target = z == a ? b : a;
        var half = Vector512.Create(0.5 * scale);
        for (var k = 0; k < count; k++)
        {
            var m = k == 0 ? 0 : count - k;
            var (r, i, rm, im) = (z[2 * k], z[2 * k + 1], z[2 * m], z[2 * m + 1]);
            target[2 * k] = half * (r + rm - (i - im));
            target[2 * k + 1] = half * (i + im + (r - rm));
        }

        if (target != a)
            target.CopyTo(a);
    }

    private void Cosine(Span<Vector512<double>> a, Span<Vector512<double>> b)
    {
        // Even places in order, odd places backwards behind them.
        for (var i = 0; 2 * i < count; i++)
            (b[2 * i], b[2 * i + 1]) = (a[4 * i], a[4 * i + 1]);
        for (var i = 0; 2 * i + 1 < count; i++)
            (b[2 * (count - 1 - i)], b[2 * (count - 1 - i) + 1]) = (a[4 * i + 2], a[4 * i + 3]);
        var z = Fourier(b, a);
        var target = z == a ? b : a;
        for (var k = 0; k < count; k++)
        {
            var m = k == 0 ? 0 : count - k;
            var (r, i, rm, im) = (z[2 * k], z[2 * k + 1], z[2 * m], z[2 * m + 1]);
            var c = Vector512.Create(0.5 * cosines[k]);
            var s = Vector512.Create(0.5 * sines[k]);
            target[2 * k] = c * (r + rm) + s * (i - im);
            target[2 * k + 1] = c * (i + im) - s * (r - rm);
        }

        if (target != a)
            target.CopyTo(a);
    }

    private void CosineInverse(Span<Vector512<double>> a, Span<Vector512<double>> b)
    {
        // Spectrum of the reordered lines, with real and imaginary parts exchanged: a forward transform then does the work of an inverse one.
        var scale = 1.0 / count;
        for (var k = 0; k < count; k++)
        {
            var c = Vector512.Create(scale * cosines[k]);
            var s = Vector512.Create(scale * sines[k]);
            var (p, q) = (a[2 * k], a[2 * k + 1]);
            var (pm, qm) = k == 0 ? (Vector512<double>.Zero, Vector512<double>.Zero) : (a[2 * (count - k)], a[2 * (count - k) + 1]);
            // (c + is)(p − i pm) + i (c + is)(q − i qm)
            b[2 * k + 1] = c * p + s * pm - (s * q - c * qm);
            b[2 * k] = s * p - c * pm + (c * q + s * qm);
        }

        var z = Fourier(b, a);
        var target = z == a ? b : a;
        for (var i = 0; 2 * i < count; i++)
            (target[4 * i], target[4 * i + 1]) = (z[2 * i + 1], z[2 * i]);
        for (var i = 0; 2 * i + 1 < count; i++)
            (target[4 * i + 2], target[4 * i + 3]) = (z[2 * (count - 1 - i) + 1], z[2 * (count - 1 - i)]);
        if (target != a)
            target.CopyTo(a);
    }

    // Self-sorting transform (Stockham); returns whichever of the two holds the result.
    private Span<Vector512<double>> Fourier(Span<Vector512<double>> source, Span<Vector512<double>> other)
    {
        foreach (var stage in stages)
        {
            stage.Apply(source, other);
            var swap = source;
            source = other;
            other = swap;
        }

        return source;
    }

    private sealed class Stage
    {
        private readonly int radix;
        private readonly int parts;
        private readonly int stride;
        private readonly double[] twiddles;
        private readonly double[] roots;

        public Stage(int radix, int length, int stride)
        {
            this.radix = radix;
            this.stride = stride;
            parts = length / radix;
            twiddles = new double[2 * parts * radix];
            for (var p = 0; p < parts; p++)
            {
                for (var k = 0; k < radix; k++)
                    (twiddles[2 * (p * radix + k) + 1], twiddles[2 * (p * radix + k)]) = Math.SinCos(-2 * Math.PI * ((long)p * k % length) / length);
            }

            roots = new double[2 * radix];
            for (var k = 0; k < radix; k++)
                (roots[2 * k + 1], roots[2 * k]) = Math.SinCos(-2 * Math.PI * k / radix);
        }

        public void Apply(ReadOnlySpan<Vector512<double>> x, Span<Vector512<double>> y)
        {
            switch (radix)
            {
                case 2:
                    Two(x, y);
                    break;
                case 4:
                    Four(x, y);
                    break;
                default:
                    Any(x, y);
                    break;
            }
        }

        private void Two(ReadOnlySpan<Vector512<double>> x, Span<Vector512<double>> y)
        {
            for (var p = 0; p < parts; p++)
            {
                var (wr, wi) = (Vector512.Create(twiddles[4 * p + 2]), Vector512.Create(twiddles[4 * p + 3]));
                for (var q = 0; q < stride; q++)
                {
                    var lower = 2 * (q + stride * p);
                    var upper = 2 * (q + stride * (p + parts));
                    var (ar, ai, br, bi) = (x[lower], x[lower + 1], x[upper], x[upper + 1]);
                    var target = 2 * (q + stride * 2 * p);
                    y[target] = ar + br;
                    y[target + 1] = ai + bi;
                    Store(y, target + 2 * stride, ar - br, ai - bi, wr, wi);
                }
            }
        }

        private void Four(ReadOnlySpan<Vector512<double>> x, Span<Vector512<double>> y)
        {
            for (var p = 0; p < parts; p++)
            {
                var w = twiddles.AsSpan(8 * p, 8);
                var (w1r, w1i) = (Vector512.Create(w[2]), Vector512.Create(w[3]));
                var (w2r, w2i) = (Vector512.Create(w[4]), Vector512.Create(w[5]));
                var (w3r, w3i) = (Vector512.Create(w[6]), Vector512.Create(w[7]));
                for (var q = 0; q < stride; q++)
                {
                    var at = 2 * (q + stride * p);
                    var step = 2 * stride * parts;
                    var (ar, ai) = (x[at], x[at + 1]);
                    var (br, bi) = (x[at + step], x[at + step + 1]);
                    var (cr, ci) = (x[at + 2 * step], x[at + 2 * step + 1]);
                    var (dr, di) = (x[at + 3 * step], x[at + 3 * step + 1]);
                    var (sr, si, tr, ti) = (ar + cr, ai + ci, ar - cr, ai - ci);
                    var (ur, ui, vr, vi) = (br + dr, bi + di, br - dr, bi - di);
                    var target = 2 * (q + stride * 4 * p);
                    y[target] = sr + ur;
                    y[target + 1] = si + ui;
                    Store(y, target + 2 * stride, tr + vi, ti - vr, w1r, w1i);
                    Store(y, target + 4 * stride, sr - ur, si - ui, w2r, w2i);
                    Store(y, target + 6 * stride, tr - vi, ti + vr, w3r, w3i);
                }
            }
        }

        private void Any(ReadOnlySpan<Vector512<double>> x, Span<Vector512<double>> y)
        {
            for (var p = 0; p < parts; p++)
            {
                for (var q = 0; q < stride; q++)
                {
                    for (var k = 0; k < radix; k++)
                    {
                        var (sumR, sumI) = (x[2 * (q + stride * p)], x[2 * (q + stride * p) + 1]);
                        for (int j = 1, root = k; j < radix; j++, root = root + k < radix ? root + k : root + k - radix)
                        {
                            var at = 2 * (q + stride * (p + parts * j));
                            var (c, s) = (Vector512.Create(roots[2 * root]), Vector512.Create(roots[2 * root + 1]));
                            sumR += c * x[at] - s * x[at + 1];
                            sumI += c * x[at + 1] + s * x[at];
                        }

                        Store(y, 2 * (q + stride * (radix * p + k)), sumR, sumI,
                            Vector512.Create(twiddles[2 * (p * radix + k)]), Vector512.Create(twiddles[2 * (p * radix + k) + 1]));
                    }
                }
            }
        }

        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        private static void Store(
            Span<Vector512<double>> y, int at, Vector512<double> r, Vector512<double> i, Vector512<double> wr, Vector512<double> wi)
        {
            y[at] = wr * r - wi * i;
            y[at + 1] = wr * i + wi * r;
        }
    }
}
