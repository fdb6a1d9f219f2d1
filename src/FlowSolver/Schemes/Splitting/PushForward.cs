using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// Carries a density on a line through a map without noise, by mass: each piece of a cell goes to the cells that its image covers. Works for any map: where
/// it folds, masses add up; where it sends an interval to a point, the mass of the interval lands in that cell.
/// </summary>
internal sealed class PushForwardOnLine
{
    private static readonly double[] GaussPoints = [-0.7745966692414834, 0, 0.7745966692414834];
    private static readonly double[] GaussWeights = [5.0 / 18, 8.0 / 18, 5.0 / 18];

    private readonly int cells;
    private readonly bool periodic;
    private readonly List<(double From, double To, int Cell)> pieces = [];

    // Cells in which the image has an edge, a fold or an atom: they keep their averages.
    private readonly bool[] rough;
    private readonly double[] averages;
    private readonly double[] flows;

    public PushForwardOnLine(ChainOnLine chain, Axis axis)
    {
        cells = axis.Cells;
        periodic = axis.IsPeriodic;
        rough = new bool[cells];
        averages = new double[cells];
        flows = new double[cells];
        var margin = 1e-13 * axis.Interval.Length;
        var ends = new List<double>();
        for (var cell = 0; cell <= cells; cell++)
            ends.Add(axis.Edge(cell));
        foreach (var point in chain.Breakpoints)
        {
            ends.Add(point - margin);
            ends.Add(point + margin);
        }

        var x = ends.Where(p => p >= axis.Interval.From && p <= axis.Interval.To).Order().ToArray();
        var image = new double[x.Length];
        chain.Map(x, image);
        double Place(double position) => (position - axis.Interval.From) / axis.Width;
        foreach (var point in chain.Breakpoints.Concat(chain.MovedEnds))
            MarkRough(Place(chain.At(point)));
        var rising = 0;
        var smooth = new List<(double From, double To, double Low, double High)>();
        for (var i = 0; i + 1 < x.Length; i++)
        {
            if (x[i + 1] - x[i] <= 4 * margin && x[i + 1] - x[i] < 0.5 * axis.Width)
            {
                // The two sides of a breakpoint.
                MarkRough(Place(image[i]));
                MarkRough(Place(image[i + 1]));
                rising = 0;
                continue;
            }

            var (low, high) = (Place(image[i]), Place(image[i + 1]));
            var direction = Math.Sign(high - low);
            if (rising * direction < 0)
                MarkRough(low);
            rising = direction == 0 ? rising : direction;
            smooth.Add((x[i], x[i + 1], low, high));
        }

        var crossings = new List<(double Low, double High, double ValueLow, double ValueHigh, long Edge)>();
        foreach (var (from, to, low, high) in smooth)
        {
            for (var edge = FirstEdge(low, high); edge < EndEdge(low, high); edge++)
                crossings.Add((from, to, low, high, edge));
        }

        var solved = FindCrossings(chain, axis, crossings);
        var next = 0;
        foreach (var (from, to, low, high) in smooth)
        {
            var (first, end) = (FirstEdge(low, high), EndEdge(low, high));
            var up = high >= low;
            var start = from;
            for (var k = 0L; k <= end - first; k++)
            {
                var cell = up ? first - 1 + k : end - 1 - k;
                var stop = k == end - first ? to : Math.Max(start, solved[next + (int)(up ? k : end - first - 1 - k)]);
                if (stop > start)
                    pieces.Add((start, stop, DensityInterpolation.Wrap((int)cell, cells, periodic)));
                start = stop;
            }

            next += (int)(end - first);
        }

        // Edges strictly inside the image of an interval.
        static long FirstEdge(double a, double b) => (long)Math.Floor(Math.Min(a, b)) + 1;
        static long EndEdge(double a, double b) => Math.Max(FirstEdge(a, b), (long)Math.Ceiling(Math.Max(a, b)));
    }

    /// <summary>Writes the image of a density.</summary>
    /// <param name="source">Densities, <paramref name="stride"/> apart.</param>
    /// <param name="destination">Receives densities, <paramref name="stride"/> apart; may be <paramref name="source"/>.</param>
    /// <param name="stride">Distance between neighbours.</param>
    /// <param name="axis">The axis, for its width.</param>
    public void Apply(ReadOnlySpan<double> source, Span<double> destination, int stride, Axis axis)
    {
        averages.AsSpan().Clear();
        foreach (var (from, to, cell) in pieces)
        {
            var mass = 0.0;
            for (var g = 0; g < GaussPoints.Length; g++)
            {
                var position = 0.5 * (from + to) + 0.5 * (to - from) * GaussPoints[g];
                var place = (position - axis.Interval.From) / axis.Width - 0.5;
                mass += GaussWeights[g] * DensityInterpolation.Evaluate(source, cells, stride, periodic, place);
            }

            averages[cell] += mass * (to - from) / axis.Width;
        }

        // A smooth density is held by its values at the centres, average − δ²/24 + 3δ⁴/640: written as differences of flows between neighbours, so that the
        // sum stays, with no flow near cells that keep their averages.
        for (var face = 0; face < cells; face++)
            flows[face] = Flow(face);
        for (var cell = 0; cell < cells; cell++)
            destination[cell * stride] = averages[cell] - (flows[cell] - (cell > 0 ? flows[cell - 1] : periodic ? flows[cells - 1] : 0));
    }

    // Flow from a cell to the next; across a wall it is 0 by symmetry.
    private double Flow(int cell)
    {
        if (!periodic && cell == cells - 1)
            return 0;
        for (var offset = -1; offset <= 2; offset++)
        {
            if (rough[DensityInterpolation.Wrap(cell + offset, cells, periodic)])
                return 0;
        }

        var (left, right) = (At(0), At(1));
        var flow = (right - left) / 24 - 3 * (At(2) - 3 * right + 3 * left - At(-1)) / 640;
        // Below a quarter of either cell on each side no value can turn negative; a smooth density is far below.
        return Math.Abs(flow) < 0.25 * Math.Min(left, right) ? flow : 0;

        double At(int offset) => averages[DensityInterpolation.Wrap(cell + offset, cells, periodic)];
    }

    private void MarkRough(double place)
    {
        if (double.IsFinite(place))
            rough[DensityInterpolation.Wrap((int)Math.Floor(place), cells, periodic)] = true;
    }

    // The places in the intervals at which the image crosses an edge between cells: all at once, by secant steps kept inside their brackets.
    private static double[] FindCrossings(ChainOnLine chain, Axis axis, List<(double Low, double High, double ValueLow, double ValueHigh, long Edge)> wanted)
    {
        var count = wanted.Count;
        var (low, high) = (new double[count], new double[count]);
        var (valueLow, valueHigh) = (new double[count], new double[count]);
        var active = new int[count];
        for (var i = 0; i < count; i++)
        {
            active[i] = i;
            (low[i], high[i]) = (wanted[i].Low, wanted[i].High);
            (valueLow[i], valueHigh[i]) = (wanted[i].ValueLow - wanted[i].Edge, wanted[i].ValueHigh - wanted[i].Edge);
        }

        var (tried, image) = (new double[count], new double[count]);
        for (var round = 0; round < 90 && count > 0; round++)
        {
            var kept = 0;
            for (var k = 0; k < count; k++)
            {
                var i = active[k];
                var middle = round % 3 == 2 ? 0.5 * (low[i] + high[i]) : low[i] - valueLow[i] * (high[i] - low[i]) / (valueHigh[i] - valueLow[i]);
                if (!(middle > low[i] && middle < high[i]))
                    middle = 0.5 * (low[i] + high[i]);
                if (!(middle > low[i] && middle < high[i]) || valueLow[i] == 0 || valueHigh[i] == 0)
                    continue;
                active[kept] = i;
                tried[kept++] = middle;
            }

            count = kept;
            chain.Map(tried.AsSpan(0, count), image.AsSpan(0, count));
            for (var k = 0; k < count; k++)
            {
                var i = active[k];
                var value = (image[k] - axis.Interval.From) / axis.Width - wanted[i].Edge;
                if (value > 0 == valueHigh[i] > 0)
                    (high[i], valueHigh[i]) = (tried[k], value);
                else
                    (low[i], valueLow[i]) = (tried[k], value);
            }
        }

        for (var i = 0; i < low.Length; i++)
            low[i] = Math.Abs(valueLow[i]) < Math.Abs(valueHigh[i]) ? low[i] : high[i];
        return low;
    }
}

/// <summary>
/// Carries a density on the plane through a smooth one-to-one map without noise, by its value: ρ′(y) = ρ(P⁻¹y)·det D(P⁻¹)(y), the logarithm of ρ being interpolated.
/// </summary>
internal sealed class PullBackOnPlane
{
    private const int Points = DensityInterpolation.Points;
    private readonly Axis axisX;
    private readonly Axis axisY;
    private readonly double[] placeX;
    private readonly double[] placeY;
    private readonly double[] volume;
    private readonly WorkerTeam team;

    public PullBackOnPlane(ChainOnPlane chain, Axis axisX, Axis axisY, WorkerTeam team)
    {
        this.team = team;
        (this.axisX, this.axisY) = (axisX, axisY);
        var count = checked(axisX.Cells * axisY.Cells);
        (placeX, placeY, volume) = (new double[count], new double[count], new double[count]);
        team.Run((count + TransportOnPlane.Chunk - 1) / TransportOnPlane.Chunk, block =>
        {
            Span<double> x = stackalloc double[TransportOnPlane.Chunk];
            Span<double> y = stackalloc double[TransportOnPlane.Chunk];
            var first = block * TransportOnPlane.Chunk;
            var part = Math.Min(TransportOnPlane.Chunk, count - first);
            for (var i = 0; i < part; i++)
                (x[i], y[i]) = (axisX.Center((first + i) % axisX.Cells), axisY.Center((first + i) / axisX.Cells));
            chain.MapBack(x[..part], y[..part], placeX.AsSpan(first, part), placeY.AsSpan(first, part), volume.AsSpan(first, part));
            for (var i = first; i < first + part; i++)
            {
                placeX[i] = (placeX[i] - axisX.Interval.From) / axisX.Width - 0.5;
                placeY[i] = (placeY[i] - axisY.Interval.From) / axisY.Width - 0.5;
            }
        });
    }

    /// <summary>Writes the image of a density.</summary>
    /// <param name="source">Densities, x fastest.</param>
    /// <param name="logs">Work array of the same length.</param>
    /// <param name="destination">Receives densities; another array.</param>
    public void Apply(double[] source, double[] logs, double[] destination)
    {
        for (var i = 0; i < source.Length; i++)
            logs[i] = source[i] > 1e-290 ? Math.Log(source[i]) : double.NaN;
        team.Run(axisY.Cells, row =>
        {
            for (var i = row * axisX.Cells; i < (row + 1) * axisX.Cells; i++)
                destination[i] = volume[i] > 0 ? volume[i] * At(source, logs, placeX[i], placeY[i]) : 0;
        });
    }

    private double At(double[] source, double[] logs, double px, double py)
    {
        Span<double> weightsX = stackalloc double[Points];
        Span<double> weightsY = stackalloc double[Points];
        Span<int> columns = stackalloc int[Points];
        var (firstX, firstY) = (DensityInterpolation.Locate(px, out var withinX), DensityInterpolation.Locate(py, out var withinY));
        DensityInterpolation.Weights(withinX, weightsX);
        DensityInterpolation.Weights(withinY, weightsY);
        for (var k = 0; k < Points; k++)
            columns[k] = DensityInterpolation.Wrap(firstX + k, axisX.Cells, axisX.IsPeriodic);
        var log = 0.0;
        for (var r = 0; r < Points; r++)
        {
            var row = DensityInterpolation.Wrap(firstY + r, axisY.Cells, axisY.IsPeriodic) * axisX.Cells;
            var sum = 0.0;
            for (var k = 0; k < Points; k++)
                sum += weightsX[k] * logs[row + columns[k]];
            log += weightsY[r] * sum;
        }

        // A straight mean of the four nearest where the logarithm has gaps (NaN) or is too rough.
        var lower = DensityInterpolation.Wrap(firstY + 3, axisY.Cells, axisY.IsPeriodic) * axisX.Cells;
        var upper = DensityInterpolation.Wrap(firstY + 4, axisY.Cells, axisY.IsPeriodic) * axisX.Cells;
        var (tx, ty) = (withinX - 3, withinY - 3);
        var plain = Bilinear(logs, lower, upper, columns[3], columns[4], tx, ty);
        return Math.Abs(log - plain) < 1 ? Math.Exp(log) : Bilinear(source, lower, upper, columns[3], columns[4], tx, ty);
    }

    private static double Bilinear(double[] field, int lower, int upper, int left, int right, double tx, double ty)
        => (1 - ty) * ((1 - tx) * field[lower + left] + tx * field[lower + right]) + ty * ((1 - tx) * field[upper + left] + tx * field[upper + right]);
}
