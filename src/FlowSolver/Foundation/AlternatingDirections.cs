using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// Approximate inverse of an elliptic operator on a plane by a few sweeps of tridiagonal solves along x and y in turn.
/// </summary>
/// <remarks>
/// The operator is A = 1 + Hx + Hy with Hx u = −driftX (u_E − u_W) − diffusionX (u_E − 2u + u_W) and likewise Hy; the coefficients vary from cell to
/// cell and already carry step and cell width. One sweep of parameter p is (½ + Hx + p) u* = f − (½ + Hy − p) u, then
/// (½ + Hy + p) u = f − (½ + Hx − p) u*, with geometrically spaced parameters between the ends of the spectrum: the number of sweeps needed
/// grows with its logarithm only (D. Peaceman, H. Rachford, J. SIAM 3 (1955) 28-41; E. Wachspress, J. SIAM 10 (1962) 339-350; from memory).
/// Where |drift| exceeds diffusion the diffusion is raised to |drift| (upwinding), here and only here, so that each line solve is an M-matrix and
/// needs no pivots. Lines on a circle are closed by a rank-one correction (Sherman-Morrison).
/// The result is a fixed linear map of the right-hand side between two calls of <see cref="Prepare"/>. Not safe for two callers at once.
/// </remarks>
public sealed class AlternatingDirections
{
    private const int StripWidth = 64;
    private const int MostSweeps = 8;
    private readonly PaddedPlane plane;
    private readonly WorkerTeam team;
    private readonly int groups;
    private readonly int lineLength;
    private readonly double[] lineDiffusion;
    private readonly double[] lineDrift;
    private readonly double[] right;
    private readonly double[] upper;
    private readonly double[] middle;
    private readonly double[] closing;
    private readonly double[] shifts = new double[MostSweeps];
    private readonly Action<int> prepareBlock;
    private readonly Action<int> alongX;
    private readonly Action<int> alongY;
    private double[] diffusionX = [];
    private double[] driftX = [];
    private double[] diffusionY = [];
    private double[] driftY = [];
    private double[] source = [];
    private double[] result = [];
    private int sweep;
    private int sweeps;

    /// <summary>Takes working memory for fields on <paramref name="plane"/>.</summary>
    public AlternatingDirections(PaddedPlane plane, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(plane);
        ArgumentNullException.ThrowIfNull(team);
        this.plane = plane;
        this.team = team;
        groups = (plane.Ny + LineInterleave.Lanes - 1) / LineInterleave.Lanes;
        lineLength = (plane.Nx + 7) / 8 * 8 * LineInterleave.Lanes;
        lineDiffusion = new double[groups * lineLength];
        lineDrift = new double[groups * lineLength];
        right = plane.NewField();
        var scratch = Math.Max(plane.Length, groups * lineLength);
        upper = new double[scratch];
        middle = new double[scratch];
        closing = plane.WrapsX || plane.WrapsY ? new double[scratch] : [];
        prepareBlock = PrepareGroup;
        alongX = SolveGroup;
        alongY = SolveStrip;
    }

    /// <summary>Sets the operator. The arrays are fields on the plane; they are kept, not copied, and must not change until the next call.</summary>
    /// <param name="diffusionX">Not below 0.</param>
    /// <param name="driftX">Any sign.</param>
    /// <param name="diffusionY">Not below 0.</param>
    /// <param name="driftY">Any sign.</param>
    /// <param name="typicalDiffusion">A representative value of the diffusions; it places the parameters.</param>
    public void Prepare(double[] diffusionX, double[] driftX, double[] diffusionY, double[] driftY, double typicalDiffusion)
    {
        ArgumentNullException.ThrowIfNull(diffusionX);
        ArgumentNullException.ThrowIfNull(driftX);
        ArgumentNullException.ThrowIfNull(diffusionY);
        ArgumentNullException.ThrowIfNull(driftY);
        this.diffusionX = diffusionX;
        this.driftX = driftX;
        this.diffusionY = diffusionY;
        this.driftY = driftY;
        const double least = 0.5;
        var most = least + 4 * Math.Max(0, typicalDiffusion);
        var span = Math.Log(most / least);
        sweeps = Math.Clamp((int)Math.Ceiling(span / 1.5), 1, MostSweeps);
        for (var k = 0; k < sweeps; k++)
            shifts[k] = least * Math.Exp(span * (k + 0.5) / sweeps);
        team.Run(groups, prepareBlock);
    }

    /// <summary>Applies the approximate inverse: result ≈ A⁻¹ source. Both are fields on the plane and must differ; ghosts of the result are not filled.</summary>
    public void Apply(double[] source, double[] result)
    {
        ArgumentNullException.ThrowIfNull(source);
        ArgumentNullException.ThrowIfNull(result);
        Require.Length(source.Length, plane.Length);
        Require.Length(result.Length, plane.Length);
        this.source = source;
        this.result = result;
        var strips = (plane.Nx + StripWidth - 1) / StripWidth;
        for (sweep = 0; sweep < sweeps; sweep++)
        {
            team.Run(groups, alongX);
            team.Run(strips, alongY);
        }
    }

    private int RowsIn(int group) => Math.Min(LineInterleave.Lanes, plane.Ny - group * LineInterleave.Lanes);

    private void PrepareGroup(int group)
    {
        var at = plane.Row(group * LineInterleave.Lanes);
        var line = group * lineLength;
        LineInterleave.Gather(ref diffusionX[at], plane.Stride, RowsIn(group), plane.Nx, ref lineDiffusion[line]);
        LineInterleave.Gather(ref driftX[at], plane.Stride, RowsIn(group), plane.Nx, ref lineDrift[line]);
        for (var i = line; i < line + plane.Nx * LineInterleave.Lanes; i++)
            lineDiffusion[i] = Math.Max(lineDiffusion[i], Math.Abs(lineDrift[i]));
    }

    // Solves (½ + Hx + p) u* = r for eight rows and leaves f − r + 2p u* in their place.
    private void SolveGroup(int group)
    {
        const int lanes = LineInterleave.Lanes;
        var n = plane.Nx;
        var line = group * lineLength;
        var at = plane.Row(group * lanes);
        var rows = RowsIn(group);
        ref var input = ref (sweep == 0 ? ref source[at] : ref right[at]);
        ref var d = ref middle[line];
        ref var c = ref upper[line];
        ref var diffusion = ref lineDiffusion[line];
        ref var drift = ref lineDrift[line];
        LineInterleave.Gather(ref input, plane.Stride, rows, n, ref d);
        var shift = Vector512.Create(0.5 + shifts[sweep]);
        var one = Vector512<double>.One;

        if (!plane.WrapsX)
        {
            var alpha = LineInterleave.Load(ref diffusion, 0);
            var beta = LineInterleave.Load(ref drift, 0);
            var inverse = one / (shift + alpha + beta);
            var previousC = -(alpha + beta) * inverse;
            var previousD = LineInterleave.Load(ref d, 0) * inverse;
            previousC.StoreUnsafe(ref c);
            previousD.StoreUnsafe(ref d);
            for (var i = 1; i < n; i++)
            {
                var index = (nuint)(i * lanes);
                alpha = Vector512.LoadUnsafe(ref diffusion, index);
                beta = Vector512.LoadUnsafe(ref drift, index);
                var lower = beta - alpha;
                var above = alpha + beta;
                var diagonal = i == n - 1 ? shift - lower : shift + alpha + alpha;
                inverse = one / (diagonal - lower * previousC);
                previousC = -above * inverse;
                previousD = (Vector512.LoadUnsafe(ref d, index) - lower * previousD) * inverse;
                previousC.StoreUnsafe(ref c, index);
                previousD.StoreUnsafe(ref d, index);
            }

            for (var i = n - 2; i >= 0; i--)
            {
                var index = (nuint)(i * lanes);
                previousD = Vector512.LoadUnsafe(ref d, index) - Vector512.LoadUnsafe(ref c, index) * previousD;
                previousD.StoreUnsafe(ref d, index);
            }
        }
        else
        {
            ref var q = ref closing[line];
            var alpha = LineInterleave.Load(ref diffusion, 0);
            var beta = LineInterleave.Load(ref drift, 0);
            // The corner entries are taken out by a rank-one change with γ = −(first diagonal entry).
            var cornerLow = beta - alpha;
            var lastAt = (nint)(n - 1) * lanes;
            var cornerHigh = -(LineInterleave.Load(ref diffusion, lastAt) + LineInterleave.Load(ref drift, lastAt));
            var gamma = -(shift + alpha + alpha);
            var inverse = one / (-gamma - gamma);
            var previousC = -(alpha + beta) * inverse;
            var previousD = LineInterleave.Load(ref d, 0) * inverse;
            var previousQ = gamma * inverse;
            previousC.StoreUnsafe(ref c);
            previousD.StoreUnsafe(ref d);
            previousQ.StoreUnsafe(ref q);
            for (var i = 1; i < n; i++)
            {
                var index = (nuint)(i * lanes);
                alpha = Vector512.LoadUnsafe(ref diffusion, index);
                beta = Vector512.LoadUnsafe(ref drift, index);
                var lower = beta - alpha;
                var diagonal = shift + alpha + alpha;
                var extra = Vector512<double>.Zero;
                if (i == n - 1)
                {
                    diagonal -= cornerLow * cornerHigh / gamma;
                    extra = cornerHigh;
                }

                inverse = one / (diagonal - lower * previousC);
                previousC = -(alpha + beta) * inverse;
                previousD = (Vector512.LoadUnsafe(ref d, index) - lower * previousD) * inverse;
                previousQ = (extra - lower * previousQ) * inverse;
                previousC.StoreUnsafe(ref c, index);
                previousD.StoreUnsafe(ref d, index);
                previousQ.StoreUnsafe(ref q, index);
            }

            var lastD = previousD;
            var lastQ = previousQ;
            for (var i = n - 2; i >= 0; i--)
            {
                var index = (nuint)(i * lanes);
                var above = Vector512.LoadUnsafe(ref c, index);
                previousD = Vector512.LoadUnsafe(ref d, index) - above * previousD;
                previousQ = Vector512.LoadUnsafe(ref q, index) - above * previousQ;
                previousD.StoreUnsafe(ref d, index);
                previousQ.StoreUnsafe(ref q, index);
            }

            var ratio = cornerLow / gamma;
            var factor = (previousD + ratio * lastD) / (one + previousQ + ratio * lastQ);
            for (var i = 0; i < n; i++)
            {
                var index = (nuint)(i * lanes);
                (Vector512.LoadUnsafe(ref d, index) - factor * Vector512.LoadUnsafe(ref q, index)).StoreUnsafe(ref d, index);
            }
        }

        // Back to rows; the scratch of this group's upper entries is free to hold them.
        ref var solution = ref c;
        var width = (n + 7) / 8 * 8;
        LineInterleave.Scatter(ref d, n, ref solution, width, rows);
        var twice = Vector512.Create(2 * shifts[sweep]);
        for (var k = 0; k < rows; k++)
        {
            var row = (nuint)(at + k * plane.Stride);
            ref var from = ref (sweep == 0 ? ref LineInterleave.First(source) : ref LineInterleave.First(right));
            for (var i = 0; i < width; i += lanes)
            {
                var index = row + (nuint)i;
                var value = Vector512.LoadUnsafe(ref LineInterleave.First(source), index) - Vector512.LoadUnsafe(ref from, index)
                    + twice * Vector512.LoadUnsafe(ref solution, (nuint)(k * width + i));
                value.StoreUnsafe(ref LineInterleave.First(right), index);
            }
        }
    }

    // Solves (½ + Hy + p) u = r for a strip of columns and leaves f − r + (p + p′) u in its place, or u in the result at the last sweep.
    private void SolveStrip(int strip)
    {
        const int lanes = LineInterleave.Lanes;
        var from = strip * StripWidth;
        var width = (Math.Min(StripWidth, plane.Nx - from) + 7) / 8 * 8;
        var n = plane.Ny;
        var stride = plane.Stride;
        var start = plane.Row(0) + from;
        ref var r = ref right[start];
        ref var f = ref source[start];
        ref var z = ref result[start];
        ref var c = ref upper[start];
        ref var d = ref middle[start];
        ref var diffusion = ref diffusionY[start];
        ref var drift = ref driftY[start];
        var shift = Vector512.Create(0.5 + shifts[sweep]);
        var one = Vector512<double>.One;
        var last = sweep == sweeps - 1;
        var carry = Vector512.Create(last ? 0 : shifts[sweep] + shifts[sweep + 1]);

        if (plane.WrapsY)
        {
            SolveClosedStrip(start, width, shift);
        }
        else
        {
            for (var j = 0; j < n; j++)
            {
                for (var i = 0; i < width; i += lanes)
                {
                    var index = (nuint)(j * stride + i);
                    var beta = Vector512.LoadUnsafe(ref drift, index);
                    var alpha = Vector512.Max(Vector512.LoadUnsafe(ref diffusion, index), Vector512.Abs(beta));
                    var lower = beta - alpha;
                    var above = alpha + beta;
                    if (j == 0)
                    {
                        var first = one / (shift + above);
                        (-above * first).StoreUnsafe(ref c, index);
                        (Vector512.LoadUnsafe(ref r, index) * first).StoreUnsafe(ref d, index);
                        continue;
                    }

                    var before = index - (nuint)stride;
                    var diagonal = j == n - 1 ? shift - lower : shift + alpha + alpha;
                    var inverse = one / (diagonal - lower * Vector512.LoadUnsafe(ref c, before));
                    (-above * inverse).StoreUnsafe(ref c, index);
                    ((Vector512.LoadUnsafe(ref r, index) - lower * Vector512.LoadUnsafe(ref d, before)) * inverse).StoreUnsafe(ref d, index);
                }
            }

            for (var j = n - 2; j >= 0; j--)
            {
                for (var i = 0; i < width; i += lanes)
                {
                    var index = (nuint)(j * stride + i);
                    (Vector512.LoadUnsafe(ref d, index) - Vector512.LoadUnsafe(ref c, index) * Vector512.LoadUnsafe(ref d, index + (nuint)stride))
                        .StoreUnsafe(ref d, index);
                }
            }
        }

        for (var j = 0; j < n; j++)
        {
            for (var i = 0; i < width; i += lanes)
            {
                var index = (nuint)(j * stride + i);
                var u = Vector512.LoadUnsafe(ref d, index);
                if (last)
                    u.StoreUnsafe(ref z, index);
                else
                    (Vector512.LoadUnsafe(ref f, index) - Vector512.LoadUnsafe(ref r, index) + carry * u).StoreUnsafe(ref r, index);
            }
        }
    }

    private void SolveClosedStrip(int start, int width, Vector512<double> shift)
    {
        const int lanes = LineInterleave.Lanes;
        var n = plane.Ny;
        var stride = plane.Stride;
        ref var r = ref right[start];
        ref var c = ref upper[start];
        ref var d = ref middle[start];
        ref var q = ref closing[start];
        ref var diffusion = ref diffusionY[start];
        ref var drift = ref driftY[start];
        var one = Vector512<double>.One;
        var lastRow = (nuint)((n - 1) * stride);
        for (var j = 0; j < n; j++)
        {
            for (var i = 0; i < width; i += lanes)
            {
                var index = (nuint)(j * stride + i);
                var beta = Vector512.LoadUnsafe(ref drift, index);
                var alpha = Vector512.Max(Vector512.LoadUnsafe(ref diffusion, index), Vector512.Abs(beta));
                var lower = beta - alpha;
                var above = alpha + beta;
                var diagonal = shift + alpha + alpha;
                if (j == 0)
                {
                    var first = one / (diagonal + diagonal);
                    (-above * first).StoreUnsafe(ref c, index);
                    (Vector512.LoadUnsafe(ref r, index) * first).StoreUnsafe(ref d, index);
                    (-diagonal * first).StoreUnsafe(ref q, index);
                    continue;
                }

                var extra = Vector512<double>.Zero;
                if (j == n - 1)
                {
                    var (cornerLow, gamma) = Corner(ref diffusion, ref drift, (nuint)i, shift);
                    extra = -above;
                    diagonal -= cornerLow * extra / gamma;
                }

                var before = index - (nuint)stride;
                var inverse = one / (diagonal - lower * Vector512.LoadUnsafe(ref c, before));
                (-above * inverse).StoreUnsafe(ref c, index);
                ((Vector512.LoadUnsafe(ref r, index) - lower * Vector512.LoadUnsafe(ref d, before)) * inverse).StoreUnsafe(ref d, index);
                ((extra - lower * Vector512.LoadUnsafe(ref q, before)) * inverse).StoreUnsafe(ref q, index);
            }
        }

        for (var j = n - 2; j >= 0; j--)
        {
            for (var i = 0; i < width; i += lanes)
            {
                var index = (nuint)(j * stride + i);
                var above = Vector512.LoadUnsafe(ref c, index);
                (Vector512.LoadUnsafe(ref d, index) - above * Vector512.LoadUnsafe(ref d, index + (nuint)stride)).StoreUnsafe(ref d, index);
                (Vector512.LoadUnsafe(ref q, index) - above * Vector512.LoadUnsafe(ref q, index + (nuint)stride)).StoreUnsafe(ref q, index);
            }
        }

        // The factor of each column is kept in the last row of the upper entries, which nothing reads any more.
        for (var i = 0; i < width; i += lanes)
        {
            var (cornerLow, gamma) = Corner(ref diffusion, ref drift, (nuint)i, shift);
            var ratio = cornerLow / gamma;
            var end = lastRow + (nuint)i;
            var factor = (Vector512.LoadUnsafe(ref d, (nuint)i) + ratio * Vector512.LoadUnsafe(ref d, end))
                / (one + Vector512.LoadUnsafe(ref q, (nuint)i) + ratio * Vector512.LoadUnsafe(ref q, end));
            factor.StoreUnsafe(ref c, end);
        }

        for (var j = 0; j < n; j++)
        {
            for (var i = 0; i < width; i += lanes)
            {
                var index = (nuint)(j * stride + i);
                (Vector512.LoadUnsafe(ref d, index) - Vector512.LoadUnsafe(ref c, lastRow + (nuint)i) * Vector512.LoadUnsafe(ref q, index))
                    .StoreUnsafe(ref d, index);
            }
        }
    }

    private static (Vector512<double> CornerLow, Vector512<double> Gamma) Corner(
        ref double diffusion, ref double drift, nuint index, Vector512<double> shift)
    {
        var beta = Vector512.LoadUnsafe(ref drift, index);
        var alpha = Vector512.Max(Vector512.LoadUnsafe(ref diffusion, index), Vector512.Abs(beta));
        return (beta - alpha, -(shift + alpha + alpha));
    }
}
