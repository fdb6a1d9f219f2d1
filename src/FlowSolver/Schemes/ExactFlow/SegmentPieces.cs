using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// V between the centres of neighbouring cells and the mean of e^(V/T) there, which is what the rate between the two cells needs. Works on all
/// segments that start in one row of the grid at once.
/// </summary>
internal sealed class SegmentPieces
{
    // Of a landscape with kinks or jumps at unknown places: fine enough that a kink inside a piece costs little, and with the face between two pieces.
    private const int TangentPieces = 16;

    private readonly Problem problem;
    private readonly Grid grid;
    private readonly bool smooth;
    private readonly double[] x;
    private readonly double[] y;
    // Smooth: V at the three quarter points, then V just beyond the middle, which differs from that just before it only where a periodic axis closes.
    // Otherwise: V at the middle of each piece.
    private readonly double[][] values;
    private readonly double[][] slopes;
    private readonly double[] unused;
    // What the pieces of all segments of the row are made of: V at their ends in temperatures above the middle of the segment's two ends, less the
    // largest of the segment, and the exponentials.
    private readonly double[][] exponents;
    private readonly double[][] exponentials;
    private double width;

    public SegmentPieces(Problem problem, Grid grid)
    {
        this.problem = problem;
        this.grid = grid;
        smooth = problem.Potential.IsSmooth;
        x = new double[grid.Nx];
        y = new double[grid.Y is null ? 0 : grid.Nx];
        values = Rows(smooth ? 4 : TangentPieces);
        slopes = Rows(smooth ? 0 : TangentPieces);
        unused = new double[smooth || grid.Y is null ? 0 : grid.Nx];
        exponents = Rows(smooth ? 6 : 2 * TangentPieces + 2);
        exponentials = Rows(exponents.Length);
    }

    private double[][] Rows(int count)
    {
        var rows = new double[count][];
        for (var k = 0; k < count; k++)
            rows[k] = new double[grid.Nx];
        return rows;
    }

    /// <summary>Evaluates V on the segments that start at the centres of a row and lead to the right or upwards.</summary>
    public void Sample(int row, bool alongX)
    {
        var axis = alongX ? grid.X : grid.Y!;
        width = axis.Width;
        var potential = problem.Potential;
        if (!smooth)
        {
            for (var k = 0; k < TangentPieces; k++)
            {
                Place(row, alongX, (k + 0.5) / TangentPieces);
                potential.Value(x, y, values[k]);
                if (alongX)
                    potential.Gradient(x, y, slopes[k], unused);
                else
                    potential.Gradient(x, y, unused, slopes[k]);
            }

            return;
        }

        for (var k = 0; k < 3; k++)
        {
            Place(row, alongX, 0.25 * (k + 1));
            potential.Value(x, y, values[k]);
        }

        values[1].CopyTo(values[3], 0);
        if (!axis.IsPeriodic)
            return;
        if (alongX)
            values[3][^1] = potential.ValueAt(axis.Interval.From, grid.Y?.Center(row) ?? 0);
        else if (row == grid.Ny - 1)
        {
            y.AsSpan().Fill(axis.Interval.From);
            potential.Value(x, y, values[3]);
        }
    }

    // Points a share of a cell's width beyond the centres of a row, wrapped where they leave a periodic axis. Beyond a wall they are not used.
    private void Place(int row, bool alongX, double share)
    {
        for (var i = 0; i < x.Length; i++)
            x[i] = alongX ? Beyond(grid.X, i, share) : grid.X.Center(i);
        if (grid.Y is not null)
            y.AsSpan().Fill(alongX ? grid.Y.Center(row) : Beyond(grid.Y, row, share));
    }

    private static double Beyond(Axis axis, int cell, double share)
    {
        if (cell < axis.Cells - 1 || share < 0.5)
            return axis.Center(cell) + share * axis.Width;
        return share == 0.5 ? axis.Interval.To : axis.Interval.From + (share - 0.5) * axis.Width;
    }

    /// <summary>
    /// The rates across the segments sampled last: forward = s·e^((first − middle)/T)/⟨e^((V − middle)/T)⟩ and back the same with last, s = MT/h².
    /// </summary>
    /// <param name="first">V at the centres where the segments start.</param>
    /// <param name="last">V at the centres where they end.</param>
    /// <param name="forward">Receives the rates from the first to the last centre.</param>
    /// <param name="back">Receives the rates back.</param>
    /// <param name="count">Number of segments.</param>
    public void Rates(ReadOnlySpan<double> first, ReadOnlySpan<double> last, Span<double> forward, Span<double> back, int count)
    {
        for (var i = 0; i < count; i++)
            SetExponents(i, first[i], last[i]);
        for (var k = 0; k < exponents.Length; k++)
            VectorMath.Exp(exponents[k].AsSpan(0, count), exponentials[k].AsSpan(0, count));
        var scale = problem.Mobility * problem.Temperature / (width * width);
        for (var i = 0; i < count; i++)
        {
            double mean;
            if (smooth)
            {
                mean = 0.25 * (Mean(0, 1, i) + Mean(1, 2, i) + Mean(3, 4, i) + Mean(4, 5, i));
            }
            else
            {
                mean = 0;
                for (var k = 0; k < TangentPieces; k++)
                    mean += Mean(2 * k + 1, 2 * k + 2, i);
                mean /= TangentPieces;
            }

            forward[i] = scale * exponentials[0][i] / mean;
            back[i] = scale * exponentials[^1][i] / mean;
        }
    }

    // First and last entry: the two ends of the segment. Between them, smooth: the quarter points with the middle twice; otherwise the ends of each piece.
    private void SetExponents(int i, double first, double last)
    {
        var middle = 0.5 * first + 0.5 * last;
        var inverse = 1 / problem.Temperature;
        var low = (first - middle) * inverse;
        var high = (last - middle) * inverse;
        exponents[0][i] = low;
        exponents[^1][i] = high;
        if (smooth)
        {
            // Where V is not finite between two centres at which it is, it is taken linear between them.
            exponents[1][i] = FiniteOr((values[0][i] - middle) * inverse, 0.5 * low);
            exponents[2][i] = FiniteOr((values[1][i] - middle) * inverse, 0);
            exponents[3][i] = FiniteOr((values[3][i] - middle) * inverse, 0);
            exponents[4][i] = FiniteOr((values[2][i] - middle) * inverse, 0.5 * high);
        }
        else
        {
            for (var k = 0; k < TangentPieces; k++)
            {
                var a = FiniteOr((values[k][i] - middle) * inverse, 0);
                var half = FiniteOr(slopes[k][i] * inverse * width / (2 * TangentPieces), 0);
                exponents[2 * k + 1][i] = a - half;
                exponents[2 * k + 2][i] = a + half;
            }
        }

        var largest = double.NegativeInfinity;
        foreach (var row in exponents)
            largest = Math.Max(largest, row[i]);
        foreach (var row in exponents)
            row[i] -= largest;
    }

    // Mean of e^a over a piece on which a is linear: (e^b − e^a)/(b − a), and where that cancels ½(e^a + e^b)·tanh(d/2)/(d/2), d = b − a, by its series.
    private double Mean(int from, int to, int i)
    {
        var d = exponents[to][i] - exponents[from][i];
        var (a, b) = (exponentials[from][i], exponentials[to][i]);
        if (Math.Abs(d) > 0.125)
            return (b - a) / d;
        var z = 0.25 * d * d;
        var series = 1 + z * (-1.0 / 3 + z * (2.0 / 15 + z * (-17.0 / 315 + z * (62.0 / 2835 - z * (1382.0 / 155925)))));
        return 0.5 * (a + b) * series;
    }

    /// <summary>log ⟨e^((V − (first + last)/2)/T)⟩ over a segment in one dimension that holds kinks or jumps: it is cut at each of them too.</summary>
    /// <param name="problem">The problem.</param>
    /// <param name="interval">The axis.</param>
    /// <param name="from">Centre at which the segment starts.</param>
    /// <param name="to">Centre at which it ends; beyond the upper end of a periodic axis for the segment that closes it.</param>
    /// <param name="first">V at <paramref name="from"/>.</param>
    /// <param name="last">V at <paramref name="to"/>.</param>
    /// <param name="kinks">Kinks and jumps on the axis.</param>
    public static double KinkedLogMean(
        Problem problem, Interval interval, double from, double to, double first, double last, IReadOnlyList<Kink> kinks)
    {
        var cuts = new List<double>();
        for (var k = 0; k <= 4; k++)
            cuts.Add(k == 4 ? to : from + 0.25 * k * (to - from));
        // The seam of a periodic axis may be a jump of its own.
        if (to > interval.To)
            cuts.Add(interval.To);
        foreach (var kink in kinks)
        {
            if (kink.Position > from && kink.Position < to)
                cuts.Add(kink.Position);
            if (kink.Position + interval.Length > from && kink.Position + interval.Length < to)
                cuts.Add(kink.Position + interval.Length);
        }

        cuts.Sort();
        var middle = 0.5 * first + 0.5 * last;
        var ends = new List<(double Low, double High, double Share)>();
        var largest = double.NegativeInfinity;
        for (var k = 1; k < cuts.Count; k++)
        {
            var length = cuts[k] - cuts[k - 1];
            if (!(length > 0))
                continue;
            // One-sided values at the ends of the piece, by the straight line through two points just inside it: exact where V is linear,
            // and on the right side of a jump.
            var inset = 1e-3 * length;
            var near = At(cuts[k - 1] + inset);
            var far = At(cuts[k] - inset);
            var slope = (far - near) / (length - 2 * inset);
            var low = Math.Abs(At(cuts[k - 1]) - near) < 10 * Math.Abs(slope) * inset ? At(cuts[k - 1]) : near - slope * inset;
            var high = Math.Abs(At(cuts[k]) - far) < 10 * Math.Abs(slope) * inset ? At(cuts[k]) : far + slope * inset;
            low = FiniteOr((low - middle) / problem.Temperature, 0);
            high = FiniteOr((high - middle) / problem.Temperature, 0);
            ends.Add((low, high, length / (to - from)));
            largest = Math.Max(largest, Math.Max(low, high));
        }

        var sum = 0.0;
        foreach (var (low, high, share) in ends)
            sum += share * MeanOfExponential(low, high, largest);
        return largest + Math.Log(sum);

        double At(double position) => problem.Potential.ValueAt(position <= interval.To ? position : position - interval.Length);
    }

    private static double FiniteOr(double value, double otherwise) => double.IsFinite(value) ? value : otherwise;

    // Mean of e^(a − shift) with a linear from low to high: e^(larger end − shift) · (1 − e^(−d))/d with d their distance.
    private static double MeanOfExponential(double low, double high, double shift)
    {
        var d = Math.Abs(high - low);
        return Math.Exp(Math.Max(low, high) - shift) * ShareBelow(d);
    }

    // (1 − e^(−d))/d, by its series where the difference would cancel.
    private static double ShareBelow(double d)
    {
        if (d > 0.25)
            return (1 - Math.Exp(-d)) / d;
        var sum = 1.0;
        for (var k = 11; k >= 2; k--)
            sum = 1 - d / k * sum;
        return sum;
    }
}
