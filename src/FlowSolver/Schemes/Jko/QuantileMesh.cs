using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// A start density cut into parcels of fixed mass, bounded by nodes: the start in quantile coordinates.
/// </summary>
/// <remarks>
/// Between cell edges the start is interpolated like the equilibrium (see <see cref="EquilibriumProfile"/>), with the share of the equilibrium's mass
/// in place of the position, so that a start that is the equilibrium gives parcels whose masses are its own, to rounding, wherever the nodes are.
/// Nodes are spread so that each parcel spans an equal sum of cells at the start and cells of the equilibrium. Where the density jumps by more than e⁴
/// between neighbouring cells, or ends inside the domain, there is a node at the jump and the parcels on the dense side shrink towards it geometrically,
/// since they will have to fill what lies beyond. All positions are counted from the lower end of the axis.
/// </remarks>
internal sealed class QuantileMesh
{
    private const int FewestParcels = 128;
    private const int MostParcels = 1_000_000;
    private const double JumpLog = 4;
    private const double LeastMass = 1e-60;
    private const double NegligibleMass = 1e-36;

    // Two neighbours of this ratio meet the decay rate of an exponential to (log ratio)²/12, 0.4 %.
    private const double TaperRatio = 0.8;
    private const double LargestEdgeLog = 3;
    private const double MostNodesPerCell = 1e4;

    private readonly EquilibriumProfile profile;
    private readonly Axis axis;
    private readonly double[] masses;
    private readonly double[] leftSlope;
    private readonly double[] rightSlope;
    private readonly List<double> parcelGap = [];
    private readonly List<double> parcelMass = [];
    private readonly List<double> lowerEnd = [];
    private readonly List<double> upperEnd = [];

    /// <summary>Cuts a start.</summary>
    /// <param name="profile">The equilibrium between the cells.</param>
    /// <param name="density">Start, as cell averages.</param>
    /// <param name="equilibrium">Equilibrium, as cell averages.</param>
    /// <param name="parcels">Number of parcels aimed at.</param>
    /// <param name="multiple">The number of parcels made is a multiple of this.</param>
    public QuantileMesh(EquilibriumProfile profile, ReadOnlySpan<double> density, ReadOnlySpan<double> equilibrium, int parcels, int multiple)
    {
        this.profile = profile;
        axis = profile.Axis;
        masses = new double[axis.Cells];
        leftSlope = new double[axis.Cells];
        rightSlope = new double[axis.Cells];
        var total = SpanKernels.Sum(density);
        for (var i = 0; i < masses.Length; i++)
        {
            masses[i] = density[i] / total;
            if (!(masses[i] > LeastMass))
                masses[i] = 0;
        }

        SetSlopes();
        var segments = FindSegments();
        Cut(segments, equilibrium, parcels, multiple);
        Join();
    }

    /// <summary>Whether the start jumps somewhere, or ends inside the domain.</summary>
    public bool HasJumps { get; private set; }

    /// <summary>Mass of each parcel.</summary>
    public double[] Mass { get; private set; } = [];

    /// <summary>Distance between the two nodes of each parcel, known to full relative accuracy also where it is far below the spacing of doubles.</summary>
    public double[] Gap { get; private set; } = [];

    /// <summary>Positions of the nodes, one more than parcels, where the first iteration begins: the ends at the walls, gaps of the start halved.</summary>
    public double[] Position { get; private set; } = [];

    /// <summary>For each node the start's position as the parcel below sees it; differs from <see cref="UpperStart"/> across gaps.</summary>
    public double[] LowerStart { get; private set; } = [];

    /// <summary>For each node the start's position as the parcel above sees it.</summary>
    public double[] UpperStart { get; private set; } = [];

    /// <summary>Returns a number of parcels that a caller may ask for, or null.</summary>
    /// <exception cref="ArgumentOutOfRangeException">It is below 128 or above 1,000,000.</exception>
    public static int? RequireParcels(int? parcels) => parcels is null or (>= FewestParcels and <= MostParcels)
        ? parcels
        : throw new ArgumentOutOfRangeException(nameof(parcels), $"parcels was {parcels}; it must be from {FewestParcels} to {MostParcels}.");

    /// <summary>The number asked for, or four a cell within the limits.</summary>
    public static int ParcelsFor(Grid grid, int? parcels) => parcels ?? Math.Clamp(4 * grid.CellCount, FewestParcels, MostParcels);

    // A run of cells without a jump between them.
    private sealed record Segment(int First, int End)
    {
        // Sum of cells of the start and of the equilibrium at breakpoints, for spreading the nodes.
        public List<(double Position, double Count)> Breakpoints { get; } = [];

        public int Parcels { get; set; }

        public int TaperBelow { get; set; }

        public int TaperAbove { get; set; }
    }

    private double LogRatio(int cell) => Math.Log(masses[cell]) - EquilibriumLog(cell);

    private bool IsJump(int lower, int upper)
        => !(masses[lower] > 0) || !(masses[upper] > 0) || Math.Abs(Math.Log(masses[upper] / masses[lower])) > JumpLog;

    // Densities relative to the equilibrium at the edges of each cell, in units of the cell's mean.
    private void SetSlopes()
    {
        Array.Fill(leftSlope, double.NaN);
        Array.Fill(rightSlope, double.NaN);
        var cells = axis.Cells;
        for (var edge = axis.IsPeriodic ? 0 : 1; edge < cells; edge++)
        {
            var lower = edge == 0 ? cells - 1 : edge - 1;
            if (IsJump(lower, edge))
                continue;
            var at = EdgeLogRatio(lower, edge);
            rightSlope[lower] = Math.Exp(Math.Clamp(at - LogRatio(lower), -LargestEdgeLog, LargestEdgeLog));
            leftSlope[edge] = Math.Exp(Math.Clamp(at - LogRatio(edge), -LargestEdgeLog, LargestEdgeLog));
        }

        for (var cell = 0; cell < cells; cell++)
        {
            // At a jump or a wall: on as the other edge has it, for an exponential.
            var (left, right) = (leftSlope[cell], rightSlope[cell]);
            if (double.IsNaN(left))
                leftSlope[cell] = double.IsNaN(right) ? 1 : MirrorSlope(right);
            if (double.IsNaN(right))
                rightSlope[cell] = double.IsNaN(left) ? 1 : MirrorSlope(left);
        }
    }

    // log of start over equilibrium at an edge: cubic through four cells where there are four, and both densities corrected alike for their cells' values
    // being averages (see EquilibriumProfile), so that nothing is left of it when they are the same. A start rough at this level would stay so
    // under steps that do not damp.
    private double EdgeLogRatio(int lower, int upper)
    {
        var (below, above) = (LogRatio(lower), LogRatio(upper));
        var middle = 0.5 * (below + above);
        var step = EquilibriumLog(upper) - EquilibriumLog(lower);
        var correction = EquilibriumProfile.LogSinhRatio(0.5 * step) - EquilibriumProfile.LogSinhRatio(0.5 * (step + above - below));
        var (first, last) = (Neighbour(lower, -1), Neighbour(upper, 1));
        if (first < 0 || last < 0 || IsJump(first, lower) || IsJump(upper, last))
            return middle + correction;
        var bend = LogRatio(last) - above - (below - LogRatio(first));
        return middle - bend / 16 + correction - Math.Clamp(bend / 48, -0.05, 0.05);
    }

    private double EquilibriumLog(int cell) => profile.Table[EquilibriumProfile.Stride * cell + 2];

    private int Neighbour(int cell, int direction)
    {
        var next = cell + direction;
        return axis.IsPeriodic ? profile.Wrap(next) : next < axis.Cells ? next : -1;
    }

    // For an exponential of step z a cell the edges are e^(±z/2)·(z/2)/sinh(z/2): the two differ by the factor e^z.
    private static double MirrorSlope(double slope)
    {
        // slope = y/sinh(y)·e^y with y = z/2; the other edge is slope·e^(−2y). Solved by a few steps of Newton in y.
        var target = Math.Log(slope);
        var y = target;
        for (var k = 0; k < 20; k++)
        {
            var value = y - EquilibriumProfile.LogSinhRatio(y) - target;
            var derivative = 1 - (Math.Abs(y) < 1e-3 ? y / 3 : 1 / Math.Tanh(y) - 1 / y);
            y -= value / Math.Max(derivative, 0.05);
        }

        return Math.Exp(Math.Clamp(target - 2 * y, -LargestEdgeLog, LargestEdgeLog));
    }

    private List<Segment> FindSegments()
    {
        var segments = new List<Segment>();
        var cell = 0;
        while (cell < axis.Cells)
        {
            if (!(masses[cell] > 0))
            {
                cell++;
                continue;
            }

            var first = cell;
            while (cell + 1 < axis.Cells && !IsJump(cell, cell + 1))
                cell++;
            segments.Add(new Segment(first, ++cell));
        }

        return segments;
    }

    // Mass of the start between position and position + width, inside one segment.
    private double MassOf(double position, double width, Segment segment)
    {
        var cell = Math.Clamp(profile.CellOf(position), segment.First, segment.End - 1);
        var s = Math.Clamp(position / axis.Width - cell, 0, 1);
        var rest = width / axis.Width;
        var sum = 0.0;
        while (true)
        {
            var here = cell == segment.End - 1 ? rest : Math.Min(rest, 1 - s);
            sum += masses[cell] * ShareOfCell(cell, s, here);
            rest -= here;
            if (!(rest > 0) || cell == segment.End - 1)
                return sum;
            cell++;
            s = 0;
        }
    }

    private double ShareOfCell(int cell, double s, double width)
    {
        var entry = EquilibriumProfile.Stride * cell;
        var t = Math.Min(s + width, 1);
        return EquilibriumProfile.RationalShare(
            leftSlope[cell], rightSlope[cell], profile.ShareOf(entry, 0, s, s), profile.ShareOf(entry, 0, t, t), profile.ShareOf(entry, s, t, width));
    }

    private void Cut(List<Segment> segments, ReadOnlySpan<double> equilibrium, int parcels, int multiple)
    {
        Spread(segments, equilibrium);
        var total = 0.0;
        foreach (var segment in segments)
            total += segment.Breakpoints[^1].Count;
        foreach (var segment in segments)
            segment.Parcels = Math.Max(2, (int)Math.Round(parcels * segment.Breakpoints[^1].Count / total));
        CountTapers(segments);
        foreach (var segment in segments)
            HasJumps |= segment.TaperBelow + segment.TaperAbove > 0;

        var made = 0;
        foreach (var segment in segments)
            made += segment.Parcels + segment.TaperBelow + segment.TaperAbove;
        var largest = segments[0];
        foreach (var segment in segments)
        {
            if (segment.Parcels > largest.Parcels)
                largest = segment;
        }

        // At least four rows of the solver's lanes.
        var wanted = Math.Max(4 * multiple, (made + multiple - 1) / multiple * multiple);
        largest.Parcels += wanted - made;
        foreach (var segment in segments)
            CutSegment(segment);
    }

    // Breakpoints: the start's own edges, and inside its cells the places that the equilibrium's edges have in mass.
    private void Spread(List<Segment> segments, ReadOnlySpan<double> equilibrium)
    {
        var cells = axis.Cells;
        var below = new double[cells + 1];
        var above = new double[cells + 1];
        var scale = 1 / SpanKernels.Sum(equilibrium);
        for (var i = 0; i < cells; i++)
            below[i + 1] = below[i] + equilibrium[i] * scale;
        for (var i = cells - 1; i >= 0; i--)
            above[i] = above[i + 1] + equilibrium[i] * scale;
        var startBelow = new double[cells + 1];
        var startAbove = new double[cells + 1];
        for (var i = 0; i < cells; i++)
            startBelow[i + 1] = startBelow[i] + masses[i];
        for (var i = cells - 1; i >= 0; i--)
            startAbove[i] = startAbove[i + 1] + masses[i];

        // The share of cell `cell` of the start at which the equilibrium's edge `edge` lies; masses are counted from the nearer end of the axis.
        double PlaceOf(int cell, int edge) => startBelow[cell] < 0.5
            ? (below[edge] - startBelow[cell]) / masses[cell]
            : 1 - (above[edge] - startAbove[cell + 1]) / masses[cell];

        var next = 0;
        foreach (var segment in segments)
        {
            var count = 0.0;
            segment.Breakpoints.Add((segment.First * axis.Width, 0));
            for (var cell = segment.First; cell < segment.End; cell++)
            {
                // Edge `next` is the first of the equilibrium above the current place; lastMark is where the last one was, in cells of the start.
                var place = 0.0;
                while (next <= cells && PlaceOf(cell, next) <= 0)
                    next++;
                while (next <= cells && PlaceOf(cell, next) < 1)
                {
                    var mark = Math.Max(PlaceOf(cell, next), place);
                    Add(cell, mark, FractionOfEquilibriumCell(cell, place, mark, next));
                    place = mark;
                    next++;
                }

                Add(cell, 1, FractionOfEquilibriumCell(cell, place, 1, next));

                void Add(int owner, double mark, double equilibriumCells)
                {
                    var width = mark - place;
                    if (!(width > 0))
                        return;
                    count += Math.Min(width + equilibriumCells, MostNodesPerCell * width);
                    segment.Breakpoints.Add(((owner + mark) * axis.Width, count));
                }
            }
        }

        // How much of the equilibrium cell that ends at edge `edge` lies between two places of a start cell.
        double FractionOfEquilibriumCell(int cell, double place, double mark, int edge)
        {
            if (edge <= 0 || edge > cells)
                return 0;
            var mass = masses[cell] * (mark - place);
            var inCell = (below[edge] < 0.5 ? below[edge] - below[edge - 1] : above[edge - 1] - above[edge]);
            return inCell > 0 ? Math.Min(mass / inCell, 1) : 0;
        }
    }

    private void CountTapers(List<Segment> segments)
    {
        for (var k = 0; k < segments.Count; k++)
        {
            var segment = segments[k];
            var lower = k > 0 ? segments[k - 1] : axis.IsPeriodic ? segments[^1] : null;
            var upper = k + 1 < segments.Count ? segments[k + 1] : axis.IsPeriodic ? segments[0] : null;
            var cellsBelow = segment.First - (lower is null ? 0 : lower.End - (k > 0 ? 0 : axis.Cells));
            var cellsAbove = (upper is null ? axis.Cells : upper.First + (k + 1 < segments.Count ? 0 : axis.Cells)) - segment.End;
            segment.TaperBelow = Taper(segment, segment.First, lower, lower is null ? -1 : lower.End - 1, cellsBelow);
            segment.TaperAbove = Taper(segment, segment.End - 1, upper, upper is null ? -1 : upper.First, cellsAbove);
        }
    }

    // Enough to bring the parcel at the jump down to its neighbour's mass; into an empty stretch, to what can reach its far end.
    private int Taper(Segment segment, int cell, Segment? neighbour, int neighbourCell, int emptyCells)
    {
        var parcel = masses[cell] / segment.Parcels * (segment.End - segment.First);
        if (emptyCells > 0)
            return Math.Clamp((int)Math.Log(parcel / NegligibleMass, 1 / TaperRatio), 0, 40 + 6 * emptyCells);
        if (neighbour is null || (ReferenceEquals(segment, neighbour) && !IsJump(neighbourCell, cell) && !IsJump(cell, neighbourCell)))
            return 0;
        var ratio = parcel / (masses[neighbourCell] / neighbour.Parcels * (neighbour.End - neighbour.First));
        return ratio > 2 ? (int)Math.Ceiling(Math.Log(ratio, 1 / TaperRatio)) : 0;
    }

    private void CutSegment(Segment segment)
    {
        var points = segment.Breakpoints;
        var total = points[^1].Count;
        var position = points[0].Position;
        var end = points[^1].Position;
        var at = 1;
        for (var k = 1; k <= segment.Parcels; k++)
        {
            var next = end;
            if (k < segment.Parcels)
            {
                var count = total * k / segment.Parcels;
                while (at < points.Count - 1 && points[at].Count < count)
                    at++;
                var (low, high) = (points[at - 1], points[at]);
                var share = high.Count > low.Count ? Math.Clamp((count - low.Count) / (high.Count - low.Count), 0, 1) : 1;
                next = low.Position + share * (high.Position - low.Position);
                // Never closer than positions can tell: the rest of the segment in equal parts instead.
                var room = 1e-11 * axis.Width;
                next = Math.Clamp(next, position + room, end - room * (segment.Parcels - k));
            }

            var gap = next - position;
            if (k == 1)
                AddTapered(position, gap, segment, segment.TaperBelow, towardsLower: true);
            else if (k == segment.Parcels)
                AddTapered(position, gap, segment, segment.TaperAbove, towardsLower: false);
            else
                AddParcel(position, gap, segment, position, next);
            position = next;
        }
    }

    // One parcel as many that shrink towards one of its ends by a fixed ratio; pieces = 0 leaves it whole.
    private void AddTapered(double position, double gap, Segment segment, int pieces, bool towardsLower)
    {
        var end = position + gap;
        for (var k = 0; k <= pieces; k++)
        {
            // Distances of the piece's ends from the end towards which the pieces shrink.
            var power = towardsLower ? pieces - k : k;
            var far = gap * Math.Pow(TaperRatio, power);
            var near = power == pieces ? 0 : far * TaperRatio;
            if (towardsLower)
                AddParcel(position + near, far - near, segment, position + near, power == 0 ? end : position + far);
            else
                AddParcel(end - far, far - near, segment, power == 0 ? position : end - far, end - near);
        }
    }

    private void AddParcel(double position, double gap, Segment segment, double lower, double upper)
    {
        parcelGap.Add(gap);
        parcelMass.Add(MassOf(position, gap, segment));
        lowerEnd.Add(lower);
        upperEnd.Add(upper);
    }

    // Nodes from parcels: one position where two parcels touch, two where a gap lies between; the first iteration begins at its middle.
    private void Join()
    {
        var count = parcelGap.Count;
        Mass = [.. parcelMass];
        Gap = [.. parcelGap];
        SpanKernels.Scale(Mass, 1 / SpanKernels.Sum(Mass));
        LowerStart = new double[count + 1];
        UpperStart = new double[count + 1];
        Position = new double[count + 1];
        for (var j = 0; j <= count; j++)
        {
            LowerStart[j] = j > 0 ? upperEnd[j - 1] : axis.IsPeriodic ? upperEnd[^1] - axis.Interval.Length : 0;
            UpperStart[j] = j < count ? lowerEnd[j] : axis.IsPeriodic ? lowerEnd[0] + axis.Interval.Length : axis.Interval.Length;
        }

        if (!axis.IsPeriodic)
        {
            // The walls: mass reaches them in the first step, wherever it was.
            (Position[0], Position[count]) = (0, axis.Interval.Length);
        }

        for (var j = axis.IsPeriodic ? 0 : 1; j < (axis.IsPeriodic ? count + 1 : count); j++)
            Position[j] = UpperStart[j] > LowerStart[j] ? 0.5 * (LowerStart[j] + UpperStart[j]) : UpperStart[j];
        for (var j = 0; j < count; j++)
            Gap[j] += (UpperStart[j] - Position[j]) + (Position[j + 1] - LowerStart[j + 1]);
    }
}
