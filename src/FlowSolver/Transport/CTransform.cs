using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// The quadratic c-transform on a grid: φᶜ(x) = min over y of |x − y|²/(2t) + φ(y), for x at every cell centre, with y at the cell centres
/// (<see cref="Apply"/>) or anywhere in the domain (<see cref="ApplyBetweenCenters"/>). On a periodic axis |x − y| is the distance on the circle.
/// </summary>
/// <remarks>
/// Lower envelopes of parabolas along each line of each axis in turn, O(1) operations a cell: P. Felzenszwalb, D. Huttenlocher, <i>Distance
/// transforms of sampled functions</i>, Theory of Computing 8 (2012) 415-428. Departures: the crossing of two parabolas is formed from the difference of their heights and the
/// mean of their places, so that nothing cancels when φ is small; a circle is cut open and one half of it repeated at either end.
/// <para>φ may be +∞ where y is forbidden, but not everywhere. An object owns its working memory (about 2 doubles a cell), serves one caller at a
/// time, and allocates nothing in a call. Results do not depend on the team's size.</para>
/// </remarks>
public sealed class CTransform
{
    private const int LinesPerBlock = 16;
    private const int NewtonSteps = 8;

    // Columns of a strip stand this many doubles further apart than they are long: a power-of-two distance would fall on few cache sets.
    private const int Padding = 8;

    private readonly WorkerTeam team;
    private readonly int nx;
    private readonly int ny;
    private readonly LineEnvelope[] rowEnvelopes;
    private readonly LineEnvelope[] columnEnvelopes;
    private readonly double[] afterRows;
    private readonly int[] columnOfMinimum;
    private readonly double[] strips;
    private readonly int[] stripIndices;
    private readonly int rowBlocks;
    private readonly int columnBlocks;
    private readonly Action<int> rowJob;
    private readonly Action<int> columnJob;
    private readonly Action<int> refineJob;
    private double weightX;
    private double weightY;

    // Arguments of the call under way.
    private double[] potential = [];
    private double[] values = [];
    private int[]? minimisers;
    private double[] displacementX = [];
    private double[] displacementY = [];

    /// <summary>Prepares transforms on a grid.</summary>
    /// <param name="grid">A grid in one or two dimensions.</param>
    /// <param name="time">t in |x − y|²/(2t), above 0; change it by <see cref="SetTime"/>.</param>
    /// <param name="team">Threads to use.</param>
    public CTransform(Grid grid, double time, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(grid);
        ArgumentNullException.ThrowIfNull(team);
        Grid = grid;
        this.team = team;
        nx = grid.Nx;
        ny = grid.Ny;
        rowBlocks = (ny + LinesPerBlock - 1) / LinesPerBlock;
        columnBlocks = grid.Y is null ? 0 : (nx + LinesPerBlock - 1) / LinesPerBlock;
        rowEnvelopes = new LineEnvelope[rowBlocks];
        for (var i = 0; i < rowBlocks; i++)
            rowEnvelopes[i] = new LineEnvelope(nx, grid.X.IsPeriodic);
        columnEnvelopes = new LineEnvelope[columnBlocks];
        for (var i = 0; i < columnBlocks; i++)
            columnEnvelopes[i] = new LineEnvelope(ny, grid.Y!.IsPeriodic);
        afterRows = new double[grid.CellCount];
        columnOfMinimum = new int[grid.CellCount];
        strips = new double[grid.Y is null ? 0 : columnBlocks * LinesPerBlock * (ny + Padding) * 2];
        stripIndices = new int[grid.Y is null ? 0 : columnBlocks * LinesPerBlock * (ny + Padding)];
        rowJob = TransformRows;
        columnJob = TransformColumns;
        refineJob = Refine;
        SetTime(time);
    }

    /// <summary>The grid.</summary>
    public Grid Grid { get; }

    /// <summary>t in |x − y|²/(2t).</summary>
    public double Time { get; private set; }

    /// <summary>Changes t.</summary>
    /// <exception cref="ArgumentOutOfRangeException"><paramref name="time"/> is not finite or not above 0.</exception>
    public void SetTime(double time)
    {
        Time = Require.Positive(time);
        weightX = Grid.X.Width * Grid.X.Width / (2 * time);
        weightY = Grid.Y is null ? 0 : Grid.Y.Width * Grid.Y.Width / (2 * time);
    }

    /// <summary>The transform with y at the cell centres: exact for masses that sit there.</summary>
    /// <param name="potential">φ at the centres, x fastest; length the cell count. +∞ is allowed, NaN is not.</param>
    /// <param name="values">Receives φᶜ at the centres; another array of the same length.</param>
    /// <param name="minimisers">Receives the flat index of a cell y where the minimum is taken, or null.</param>
    /// <exception cref="ArgumentException">A length is wrong, or potential and values are one array.</exception>
    public void Apply(double[] potential, double[] values, int[]? minimisers = null)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(values);
        Require.Length(potential.Length, Grid.CellCount);
        Require.Length(values.Length, Grid.CellCount);
        Require.That(!ReferenceEquals(potential, values), "Potential and values were one array; they must be two.");
        if (minimisers is not null)
            Require.Length(minimisers.Length, Grid.CellCount);
        this.potential = potential;
        this.values = values;
        this.minimisers = minimisers;
        team.Run(rowBlocks, rowJob);
        if (columnBlocks > 0)
            team.Run(columnBlocks, columnJob);
        this.minimisers = null;
    }

    /// <summary>
    /// The transform with y anywhere in the domain, φ being read between the centres as the cubic through four neighbours along each axis (even
    /// across walls): the minimum over the centres, then Newton's method from there. For a smooth φ the value is right to fourth order in the
    /// cell width; where Newton does not improve on it the value at the centre stands, so values never exceed those of <see cref="Apply"/>.
    /// </summary>
    /// <param name="potential">φ at the centres, x fastest; finite.</param>
    /// <param name="values">Receives φᶜ at the centres.</param>
    /// <param name="displacementX">Receives the x part of y − x, in units of length; the shorter way round on a circle.</param>
    /// <param name="displacementY">Receives the y part of y − x; may be empty in one dimension.</param>
    /// <param name="minimisers">Receives the cell centre from which Newton's method started; length the cell count.</param>
    public void ApplyBetweenCenters(
        double[] potential, double[] values, double[] displacementX, double[] displacementY, int[] minimisers)
    {
        ArgumentNullException.ThrowIfNull(displacementX);
        ArgumentNullException.ThrowIfNull(displacementY);
        ArgumentNullException.ThrowIfNull(minimisers);
        Require.Length(displacementX.Length, Grid.CellCount);
        Require.Length(displacementY.Length, Grid.Y is null ? displacementY.Length : Grid.CellCount);
        Apply(potential, values, minimisers);
        this.minimisers = minimisers;
        this.displacementX = displacementX;
        this.displacementY = displacementY;
        team.Run(rowBlocks, refineJob);
        this.minimisers = null;
    }

    private void TransformRows(int block)
    {
        var envelope = rowEnvelopes[block];
        var target = columnBlocks > 0 ? afterRows : values;
        var indices = columnBlocks > 0 || minimisers is null ? columnOfMinimum : minimisers;
        var last = Math.Min(ny, (block + 1) * LinesPerBlock);
        for (var row = block * LinesPerBlock; row < last; row++)
        {
            var start = row * nx;
            envelope.Transform(potential.AsSpan(start, nx), weightX, target.AsSpan(start, nx), indices.AsSpan(start, nx));
        }
    }

    private void TransformColumns(int block)
    {
        // A strip of columns is turned into rows of its own first: walking a column in place would miss the cache at every step.
        var envelope = columnEnvelopes[block];
        var first = block * LinesPerBlock;
        var count = Math.Min(nx - first, LinesPerBlock);
        var stride = ny + Padding;
        var size = LinesPerBlock * stride;
        var source = strips.AsSpan(2 * block * size, size);
        var target = strips.AsSpan((2 * block + 1) * size, size);
        var indices = stripIndices.AsSpan(block * size, size);
        for (var row = 0; row < ny; row++)
        {
            var line = afterRows.AsSpan(row * nx + first, count);
            for (var c = 0; c < line.Length; c++)
                source[c * stride + row] = line[c];
        }

        for (var c = 0; c < count; c++)
            envelope.Transform(source.Slice(c * stride, ny), weightY, target.Slice(c * stride, ny), indices.Slice(c * stride, ny));
        for (var row = 0; row < ny; row++)
        {
            var line = values.AsSpan(row * nx + first, count);
            for (var c = 0; c < line.Length; c++)
                line[c] = target[c * stride + row];
            if (minimisers is null)
                continue;
            var lineIndices = minimisers.AsSpan(row * nx + first, count);
            for (var c = 0; c < lineIndices.Length; c++)
            {
                var rowOfMinimum = indices[c * stride + row];
                lineIndices[c] = rowOfMinimum * nx + columnOfMinimum[rowOfMinimum * nx + first + c];
            }
        }
    }

    private void Refine(int block)
    {
        Span<double> patch = stackalloc double[16];
        var last = Math.Min(ny, (block + 1) * LinesPerBlock);
        for (var row = block * LinesPerBlock; row < last; row++)
        {
            for (var column = 0; column < nx; column++)
                RefineAt(column, row, patch);
        }
    }

    private void RefineAt(int column, int row, Span<double> patch)
    {
        var cell = row * nx + column;
        var found = minimisers![cell];
        var (foundRow, foundColumn) = Math.DivRem(found, nx);
        var flat = Grid.Y is null;
        // Offsets from x, in cells; on a circle the shorter way.
        var aheadX = Nearest(foundColumn - column, nx, Grid.X.IsPeriodic);
        var aheadY = flat ? 0 : Nearest(foundRow - row, ny, Grid.Y!.IsPeriodic);
        double u = 0, v = 0;
        var best = values[cell];
        double bestU = 0, bestV = 0;
        var (leastU, mostU) = Room(foundColumn, nx, Grid.X.IsPeriodic);
        var (leastV, mostV) = flat ? (0.0, 0.0) : Room(foundRow, ny, Grid.Y!.IsPeriodic);
        var (baseU, baseV) = (int.MinValue, int.MinValue);
        var nearest = potential[found];
        for (var step = 0; step < NewtonSteps; step++)
        {
            var (floorU, floorV) = ((int)Math.Floor(u), (int)Math.Floor(v));
            if (floorU != baseU || floorV != baseV)
            {
                (baseU, baseV) = (floorU, floorV);
                ReadPatch(foundColumn + baseU, foundRow + baseV, nearest, patch);
            }

            Cubic(patch, u - baseU, v - baseV, flat, out var value, out var gu, out var gv, out var huu, out var huv, out var hvv);
            value += nearest + weightX * (aheadX + u) * (aheadX + u) + weightY * (aheadY + v) * (aheadY + v);
            if (value < best)
                (best, bestU, bestV) = (value, u, v);
            else if (step > 1)
                break;
            gu += 2 * weightX * (aheadX + u);
            huu += 2 * weightX;
            gv += 2 * weightY * (aheadY + v);
            hvv += 2 * weightY;
            double du, dv = 0;
            if (flat)
            {
                if (!(huu > 0))
                    break;
                du = -gu / huu;
            }
            else
            {
                var determinant = huu * hvv - huv * huv;
                if (!(determinant > 0 && huu > 0))
                    break;
                du = -(hvv * gu - huv * gv) / determinant;
                dv = -(huu * gv - huv * gu) / determinant;
            }

            // The minimum over the centres is within a cell or so of the true one where φ is smooth on the scale of a cell.
            var nextU = Math.Clamp(u + du, Math.Max(leastU, -1.5), Math.Min(mostU, 1.5));
            var nextV = Math.Clamp(v + dv, Math.Max(leastV, -1.5), Math.Min(mostV, 1.5));
            var change = Math.Abs(nextU - u) + Math.Abs(nextV - v);
            if (change <= 1e-13 * (Math.Abs(aheadX + u) + Math.Abs(aheadY + v)) || change == 0)
                break;
            (u, v) = (nextU, nextV);
        }

        values[cell] = best;
        displacementX[cell] = (aheadX + bestU) * Grid.X.Width;
        if (!flat)
            displacementY[cell] = (aheadY + bestV) * Grid.Y!.Width;
    }

    private static int Nearest(int offset, int count, bool periodic)
        => !periodic ? offset : 2 * offset > count ? offset - count : 2 * offset < -count ? offset + count : offset;

    private static (double Least, double Most) Room(int index, int count, bool periodic)
        => periodic ? (double.NegativeInfinity, double.PositiveInfinity) : (-0.5 - index, count - 0.5 - index);

    // φ − nearest at columns c−1 … c+2 and rows r−1 … r+2: differences first, so that a small slope on a large level keeps its digits.
    private void ReadPatch(int column, int row, double nearest, Span<double> patch)
    {
        var rows = Grid.Y is null ? 1 : 4;
        for (var r = 0; r < rows; r++)
        {
            var start = Grid.Y is null ? 0 : Mirror(row - 1 + r, ny, Grid.Y.IsPeriodic) * nx;
            for (var c = 0; c < 4; c++)
                patch[r * 4 + c] = potential[start + Mirror(column - 1 + c, nx, Grid.X.IsPeriodic)] - nearest;
        }
    }

    private static int Mirror(int index, int count, bool periodic)
    {
        if ((uint)index < (uint)count)
            return index;
        return periodic ? (index + count) % count : index < 0 ? -1 - index : 2 * count - 1 - index;
    }

    private static void Cubic(
        ReadOnlySpan<double> patch, double u, double v, bool flat,
        out double value, out double gu, out double gv, out double huu, out double huv, out double hvv)
    {
        Lagrange(u, out var a, out var b, out var c, out var d);
        LagrangeSlope(u, out var a1, out var b1, out var c1, out var d1);
        LagrangeBend(u, out var a2, out var b2, out var c2, out var d2);
        if (flat)
        {
            value = a * patch[0] + b * patch[1] + c * patch[2] + d * patch[3];
            gu = a1 * patch[0] + b1 * patch[1] + c1 * patch[2] + d1 * patch[3];
            huu = a2 * patch[0] + b2 * patch[1] + c2 * patch[2] + d2 * patch[3];
            (gv, huv, hvv) = (0, 0, 0);
            return;
        }

        Span<double> w = stackalloc double[12];
        Lagrange(v, out w[0], out w[1], out w[2], out w[3]);
        LagrangeSlope(v, out w[4], out w[5], out w[6], out w[7]);
        LagrangeBend(v, out w[8], out w[9], out w[10], out w[11]);
        (value, gu, gv, huu, huv, hvv) = (0, 0, 0, 0, 0, 0);
        for (var r = 0; r < 4; r++)
        {
            var line = patch.Slice(4 * r, 4);
            var f = a * line[0] + b * line[1] + c * line[2] + d * line[3];
            var f1 = a1 * line[0] + b1 * line[1] + c1 * line[2] + d1 * line[3];
            var f2 = a2 * line[0] + b2 * line[1] + c2 * line[2] + d2 * line[3];
            value += w[r] * f;
            gu += w[r] * f1;
            huu += w[r] * f2;
            gv += w[4 + r] * f;
            huv += w[4 + r] * f1;
            hvv += w[8 + r] * f;
        }
    }

    // Weights of the cubic through nodes −1, 0, 1, 2.
    private static void Lagrange(double s, out double a, out double b, out double c, out double d)
    {
        a = -s * (s - 1) * (s - 2) / 6;
        b = (s + 1) * (s - 1) * (s - 2) / 2;
        c = -(s + 1) * s * (s - 2) / 2;
        d = (s + 1) * s * (s - 1) / 6;
    }

    private static void LagrangeSlope(double s, out double a, out double b, out double c, out double d)
    {
        a = (-3 * s * s + 6 * s - 2) / 6;
        b = (3 * s * s - 4 * s - 1) / 2;
        c = (-3 * s * s + 2 * s + 2) / 2;
        d = (3 * s * s - 1) / 6;
    }

    private static void LagrangeBend(double s, out double a, out double b, out double c, out double d)
    {
        a = 1 - s;
        b = 3 * s - 2;
        c = 1 - 3 * s;
        d = s;
    }
}

/// <summary>Lower envelope of the parabolas weight·(i − k)² + height[k] along one line; owns its memory, serves one thread.</summary>
internal sealed class LineEnvelope
{
    private readonly int count;
    private readonly int before;
    private readonly int after;
    private readonly int[] place;
    private readonly double[] height;
    private readonly double[] from;
    private readonly double[] inverseDistance;

    /// <summary>Makes room for lines of <paramref name="count"/> cells.</summary>
    public LineEnvelope(int count, bool periodic)
    {
        this.count = count;
        // The nearest image of any cell lies within half a turn of 0 … count − 1.
        before = periodic ? (count + 1) / 2 : 0;
        after = periodic ? count + count / 2 + 1 : count;
        var room = after + before + 1;
        place = new int[room];
        height = new double[room];
        from = new double[room + 1];
        inverseDistance = new double[room + 1];
        for (var k = 1; k < inverseDistance.Length; k++)
            inverseDistance[k] = 0.5 / k;
    }

    /// <summary>Writes the envelope at 0 … count − 1 and the index k of a lowest parabola.</summary>
    public void Transform(ReadOnlySpan<double> heights, double weight, Span<double> envelope, Span<int> lowest)
    {
        var inverseWeight = 1 / weight;
        var top = -1;
        for (var q = -before; q < after; q++)
        {
            var h = heights[q < 0 ? q + count : q >= count ? q - count : q];
            if (!(h < double.PositiveInfinity))
                continue;
            var crossing = double.NegativeInfinity;
            while (top >= 0)
            {
                var p = place[top];
                crossing = (h - height[top]) * inverseWeight * inverseDistance[q - p] + 0.5 * (q + p);
                if (crossing > from[top])
                    break;
                top--;
            }

            if (top < 0)
                crossing = double.NegativeInfinity;
            // A parabola that only takes over beyond the line is never seen.
            else if (crossing > count - 1)
                continue;
            top++;
            place[top] = q;
            height[top] = h;
            from[top] = crossing;
        }

        if (top < 0)
        {
            envelope.Fill(double.PositiveInfinity);
            lowest.Clear();
            return;
        }

        from[top + 1] = double.PositiveInfinity;
        var k = 0;
        for (var i = 0; i < envelope.Length; i++)
        {
            while (from[k + 1] < i)
                k++;
            var p = place[k];
            envelope[i] = weight * ((double)(i - p) * (i - p)) + height[k];
            lowest[i] = p < 0 ? p + count : p >= count ? p - count : p;
        }
    }
}
