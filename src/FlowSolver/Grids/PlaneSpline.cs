using System.Runtime.CompilerServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Grids;

/// <summary>
/// The bicubic spline through a field on a plane: twice continuously differentiable, even across walls, periodic on circles.
/// </summary>
/// <remarks>
/// Cubic B-splines with coefficients from a tridiagonal solve along each axis (C. de Boor, A Practical Guide to Splines, 1978). At nodes value error
/// is 0, gradient error O(h⁴), second derivatives O(h²). Points beyond a wall are moved to the wall; on a circle they are wrapped.
/// Reading is safe from several threads; fitting is not.
/// </remarks>
public sealed class PlaneSpline
{
    private const int StripWidth = 64;
    private const int RowsPerBlock = 8;
    private readonly PaddedPlane plane;
    private readonly WorkerTeam team;
    private readonly double[] coefficients;
    private readonly double[] factorsX;
    private readonly double[] factorsY;
    private readonly double[] closingX;
    private readonly double[] closingY;
    private readonly double fromX;
    private readonly double fromY;
    private readonly double inverseWidthX;
    private readonly double inverseWidthY;
    private readonly Action<int> alongX;
    private readonly Action<int> alongY;
    private readonly double[] freeFactorsX;
    private readonly double[] freeFactorsY;
    private double[] field = [];
    private bool free;

    /// <summary>Takes memory for one spline.</summary>
    /// <param name="grid">A grid in two dimensions.</param>
    /// <param name="plane">The layout of the fields.</param>
    /// <param name="team">Threads for fitting.</param>
    public PlaneSpline(Grid grid, PaddedPlane plane, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(grid);
        ArgumentNullException.ThrowIfNull(plane);
        ArgumentNullException.ThrowIfNull(team);
        Require.That(grid.Y is not null && grid.Nx == plane.Nx && grid.Ny == plane.Ny, "The layout was for another grid; it must be for the spline's.");
        this.plane = plane;
        this.team = team;
        coefficients = plane.NewField();
        (factorsX, closingX) = Factors(plane.Nx, plane.WrapsX);
        (factorsY, closingY) = Factors(plane.Ny, plane.WrapsY);
        freeFactorsX = FreeFactors(plane.Nx);
        freeFactorsY = FreeFactors(plane.Ny);
        fromX = grid.X.Interval.From + 0.5 * grid.X.Width;
        fromY = grid.Y!.Interval.From + 0.5 * grid.Y.Width;
        inverseWidthX = 1 / grid.X.Width;
        inverseWidthY = 1 / grid.Y.Width;
        alongX = FitRows;
        alongY = FitStrip;
    }

    /// <summary>Fits the spline to a field on the plane; ghosts of the field are not read.</summary>
    /// <param name="field">The values at the nodes.</param>
    /// <param name="freeAtWalls">
    /// Whether the field may have a slope at a wall, where it is then continued by the parabola through its last values (exact for quadratic fields)
    /// instead of being even.
    /// </param>
    public void Fit(double[] field, bool freeAtWalls = false)
    {
        ArgumentNullException.ThrowIfNull(field);
        Require.Length(field.Length, plane.Length);
        this.field = field;
        free = freeAtWalls;
        team.Run((plane.Ny + RowsPerBlock - 1) / RowsPerBlock, alongX);
        team.Run((plane.Nx + StripWidth - 1) / StripWidth, alongY);
        plane.FillGhosts(coefficients);
        if (free)
            ContinueFreely();
    }

    // Ghost coefficients of the parabola through the last three.
    private void ContinueFreely()
    {
        if (!plane.WrapsX)
        {
            for (var j = 0; j < plane.Ny; j++)
            {
                var row = coefficients.AsSpan(plane.Row(j) - PaddedPlane.Ghosts, plane.Nx + 2 * PaddedPlane.Ghosts);
                var n = row.Length;
                (row[1], row[0]) = Continued(row[2], row[3], row[4]);
                (row[n - 2], row[n - 1]) = Continued(row[n - 3], row[n - 4], row[n - 5]);
            }
        }

        if (plane.WrapsY)
        {
            plane.FillGhostRows(coefficients);
            return;
        }

        for (var i = -PaddedPlane.Ghosts; i < plane.Nx + PaddedPlane.Ghosts; i++)
        {
            var (first, last) = (plane.Row(0) + i, plane.Row(plane.Ny - 1) + i);
            var s = plane.Stride;
            (coefficients[first - s], coefficients[first - 2 * s]) = Continued(coefficients[first], coefficients[first + s], coefficients[first + 2 * s]);
            (coefficients[last + s], coefficients[last + 2 * s]) = Continued(coefficients[last], coefficients[last - s], coefficients[last - 2 * s]);
        }

        static (double Near, double Far) Continued(double a, double b, double c) => (3 * (a - b) + c, 6 * a - 8 * b + 3 * c);
    }

    /// <summary>Value and gradient at points; all spans of one length.</summary>
    public void Evaluate(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value, Span<double> gradientX, Span<double> gradientY)
    {
        for (var i = 0; i < x.Length; i++)
        {
            var column = Cell(x[i], fromX, inverseWidthX, plane.Nx, plane.WrapsX, out var tx);
            var row = Cell(y[i], fromY, inverseWidthY, plane.Ny, plane.WrapsY, out var ty);
            var (v0, v1, v2, v3) = Weights(ty);
            var (s0, s1, s2, s3) = Slopes(ty);
            var (u0, u1, u2, u3) = Weights(tx);
            var (d0, d1, d2, d3) = Slopes(tx);
            var at = plane.Row(row - 1) + column - 1;
            ref var c = ref coefficients[at];
            var c0 = Vector256.LoadUnsafe(ref c);
            var c1 = Vector256.LoadUnsafe(ref c, (nuint)plane.Stride);
            var c2 = Vector256.LoadUnsafe(ref c, (nuint)(2 * plane.Stride));
            var c3 = Vector256.LoadUnsafe(ref c, (nuint)(3 * plane.Stride));
            var across = v0 * c0 + v1 * c1 + (v2 * c2 + v3 * c3);
            var slope = s0 * c0 + s1 * c1 + (s2 * c2 + s3 * c3);
            var weights = Vector256.Create(u0, u1, u2, u3);
            value[i] = Vector256.Dot(across, weights);
            gradientX[i] = Vector256.Dot(across, Vector256.Create(d0, d1, d2, d3)) * inverseWidthX;
            gradientY[i] = Vector256.Dot(slope, weights) * inverseWidthY;
        }
    }

    /// <summary>Value, gradient and second derivatives at one point.</summary>
    public PlaneJet At(double x, double y)
    {
        var column = Cell(x, fromX, inverseWidthX, plane.Nx, plane.WrapsX, out var tx);
        var row = Cell(y, fromY, inverseWidthY, plane.Ny, plane.WrapsY, out var ty);
        var (v0, v1, v2, v3) = Weights(ty);
        var (s0, s1, s2, s3) = Slopes(ty);
        var (u0, u1, u2, u3) = Weights(tx);
        var (d0, d1, d2, d3) = Slopes(tx);
        ref var c = ref coefficients[plane.Row(row - 1) + column - 1];
        var c0 = Vector256.LoadUnsafe(ref c);
        var c1 = Vector256.LoadUnsafe(ref c, (nuint)plane.Stride);
        var c2 = Vector256.LoadUnsafe(ref c, (nuint)(2 * plane.Stride));
        var c3 = Vector256.LoadUnsafe(ref c, (nuint)(3 * plane.Stride));
        var across = v0 * c0 + v1 * c1 + (v2 * c2 + v3 * c3);
        var slope = s0 * c0 + s1 * c1 + (s2 * c2 + s3 * c3);
        var bend = (1 - ty) * c0 + (3 * ty - 2) * c1 + ((1 - 3 * ty) * c2 + ty * c3);
        var weights = Vector256.Create(u0, u1, u2, u3);
        var slopes = Vector256.Create(d0, d1, d2, d3);
        return new PlaneJet(
            Vector256.Dot(across, weights),
            Vector256.Dot(across, slopes) * inverseWidthX,
            Vector256.Dot(slope, weights) * inverseWidthY,
            Vector256.Dot(across, Vector256.Create(1 - tx, 3 * tx - 2, 1 - 3 * tx, tx)) * (inverseWidthX * inverseWidthX),
            Vector256.Dot(slope, slopes) * (inverseWidthX * inverseWidthY),
            Vector256.Dot(bend, weights) * (inverseWidthY * inverseWidthY));
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static int Cell(double position, double from, double inverseWidth, int cells, bool wraps, out double rest)
    {
        var u = (position - from) * inverseWidth;
        if (wraps)
            u -= Math.Floor((u + 0.5) / cells) * cells;
        else
            u = Math.Min(Math.Max(u, -0.5), cells - 0.5);
        var whole = Math.Floor(u);
        rest = u - whole;
        return Math.Clamp((int)whole, -1, cells - 1);
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static (double, double, double, double) Weights(double t)
    {
        var s = 1 - t;
        var (t2, s2) = (t * t, s * s);
        return (s2 * s * (1.0 / 6), 2.0 / 3 - t2 + 0.5 * t2 * t, 2.0 / 3 - s2 + 0.5 * s2 * s, t2 * t * (1.0 / 6));
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static (double, double, double, double) Slopes(double t)
    {
        var s = 1 - t;
        return (-0.5 * s * s, t * (1.5 * t - 2), -s * (1.5 * s - 2), 0.5 * t * t);
    }

    // Elimination of the rows (1, 4, 1); at a wall the first and last diagonal entries are 5 (even), on a circle the corners are taken out.
    private static (double[] Factors, double[] Closing) Factors(int n, bool wraps)
    {
        var factors = new double[n];
        var closing = new double[wraps ? n : 0];
        for (var i = 0; i < n; i++)
        {
            var diagonal = i == 0 ? (wraps ? 8 : 5) : i == n - 1 ? (wraps ? 4.25 : 5) : 4.0;
            factors[i] = 1 / (diagonal - (i == 0 ? 0 : factors[i - 1]));
            if (wraps)
                closing[i] = ((i == 0 ? -4 : i == n - 1 ? 1 : 0) - (i == 0 ? 0 : closing[i - 1])) * factors[i];
        }

        for (var i = n - 2; i >= 0 && wraps; i--)
            closing[i] -= factors[i] * closing[i + 1];
        if (wraps)
        {
            var scale = 1 / (1 + closing[0] - 0.25 * closing[n - 1]);
            for (var i = 0; i < n; i++)
                closing[i] *= scale;
        }

        return (factors, closing);
    }

    // The first and last rows become (1, −1): no third difference at the ends, combined with the row beside.
    private static double[] FreeFactors(int n)
    {
        var factors = new double[n];
        factors[0] = 1;
        factors[1] = 1.0 / 5;
        for (var i = 2; i < n - 1; i++)
            factors[i] = 1 / (4 - factors[i - 1]);
        factors[n - 1] = 1 / (1 + factors[n - 2]);
        return factors;
    }

    // A line with free ends, in place: c₀ − c₁ = s₀ − s₁, then (1, 4, 1) c = 6 s, then cₙ − cₙ₋₁ = sₙ − sₙ₋₁.
    private void FitFreely(int start, int stride, int n, double[] factors)
    {
        var last = start + (n - 1) * stride;
        var end = coefficients[last] - coefficients[last - stride];
        var previous = coefficients[start] - coefficients[start + stride];
        coefficients[start] = previous;
        for (var i = 1; i < n - 1; i++)
        {
            previous = (6 * coefficients[start + i * stride] - previous) * factors[i];
            coefficients[start + i * stride] = previous;
        }

        previous = (end + previous) * factors[n - 1];
        coefficients[last] = previous;
        for (var i = n - 2; i >= 0; i--)
        {
            previous = coefficients[start + i * stride] + (i == 0 ? previous : -factors[i] * previous);
            coefficients[start + i * stride] = previous;
        }
    }

    private void FitRows(int block)
    {
        var n = plane.Nx;
        var first = block * RowsPerBlock;
        var rows = Math.Min(RowsPerBlock, plane.Ny - first);
        if (free && !plane.WrapsX)
        {
            for (var j = first; j < first + rows; j++)
            {
                field.AsSpan(plane.Row(j), n).CopyTo(coefficients.AsSpan(plane.Row(j), n));
                FitFreely(plane.Row(j), 1, n, freeFactorsX);
            }

            return;
        }

        // Four rows side by side: the recurrence of one row alone would wait for itself.
        for (var k = 0; k < rows; k += 4)
        {
            var (j0, j1, j2, j3) = (first + k, first + Math.Min(k + 1, rows - 1), first + Math.Min(k + 2, rows - 1), first + Math.Min(k + 3, rows - 1));
            ReadOnlySpan<double> s0 = field.AsSpan(plane.Row(j0), n), s1 = field.AsSpan(plane.Row(j1), n);
            ReadOnlySpan<double> s2 = field.AsSpan(plane.Row(j2), n), s3 = field.AsSpan(plane.Row(j3), n);
            Span<double> c0 = coefficients.AsSpan(plane.Row(j0), n), c1 = coefficients.AsSpan(plane.Row(j1), n);
            Span<double> c2 = coefficients.AsSpan(plane.Row(j2), n), c3 = coefficients.AsSpan(plane.Row(j3), n);
            double p0 = 0, p1 = 0, p2 = 0, p3 = 0;
            for (var i = 0; i < n; i++)
            {
                var factor = factorsX[i];
                c0[i] = p0 = (6 * s0[i] - p0) * factor;
                c1[i] = p1 = (6 * s1[i] - p1) * factor;
                c2[i] = p2 = (6 * s2[i] - p2) * factor;
                c3[i] = p3 = (6 * s3[i] - p3) * factor;
            }

            var (e0, e1, e2, e3) = (p0, p1, p2, p3);
            (p0, p1, p2, p3) = (0, 0, 0, 0);
            for (var i = n - 1; i >= 0; i--)
            {
                var factor = i == n - 1 ? 0 : factorsX[i];
                // Rows that stand in for missing ones are the same memory and come out the same: each value is read before it is written.
                var (a0, a1, a2, a3) = (c0[i], c1[i], c2[i], c3[i]);
                c0[i] = p0 = a0 - factor * p0;
                c1[i] = p1 = a1 - factor * p1;
                c2[i] = p2 = a2 - factor * p2;
                c3[i] = p3 = a3 - factor * p3;
            }

            if (!plane.WrapsX)
                continue;
            Close(c0, p0 - 0.25 * e0);
            for (var extra = 1; extra < 4 && k + extra < rows; extra++)
            {
                var c = extra == 1 ? c1 : extra == 2 ? c2 : c3;
                Close(c, c[0] - 0.25 * c[n - 1]);
            }
        }
    }

    private void Close(Span<double> row, double factor)
    {
        for (var i = 0; i < row.Length; i++)
            row[i] -= factor * closingX[i];
    }

    private void FitStrip(int strip)
    {
        var from = strip * StripWidth;
        var width = Math.Min(StripWidth, plane.Nx - from);
        var n = plane.Ny;
        if (free && !plane.WrapsY)
        {
            for (var i = from; i < from + width; i++)
                FitFreely(plane.Row(0) + i, plane.Stride, n, freeFactorsY);
            return;
        }

        for (var j = 0; j < n; j++)
        {
            var row = coefficients.AsSpan(plane.Row(j) + from, width);
            if (j == 0)
            {
                SpanKernels.Scale(row, 6 * factorsY[0]);
                continue;
            }

            SpanKernels.Scale(row, 6 * factorsY[j]);
            SpanKernels.AddScaled(row, -factorsY[j], coefficients.AsSpan(plane.Row(j - 1) + from, width));
        }

        for (var j = n - 2; j >= 0; j--)
            SpanKernels.AddScaled(coefficients.AsSpan(plane.Row(j) + from, width), -factorsY[j], coefficients.AsSpan(plane.Row(j + 1) + from, width));
        if (!plane.WrapsY)
            return;
        Span<double> factor = stackalloc double[StripWidth];
        var first = coefficients.AsSpan(plane.Row(0) + from, width);
        var last = coefficients.AsSpan(plane.Row(n - 1) + from, width);
        for (var i = 0; i < width; i++)
            factor[i] = first[i] - 0.25 * last[i];
        for (var j = 0; j < n; j++)
            SpanKernels.AddScaled(coefficients.AsSpan(plane.Row(j) + from, width), -closingY[j], factor[..width]);
    }
}

/// <summary>Value, gradient and second derivatives of a function of two variables at a point.</summary>
public readonly record struct PlaneJet(double Value, double GradientX, double GradientY, double HessianXX, double HessianXY, double HessianYY);
