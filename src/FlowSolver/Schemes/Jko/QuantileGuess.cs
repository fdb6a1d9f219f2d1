using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// First guesses of a step whose tails are right to leading order. A step's own density is π exp(−ψ/T), ψ(y) = min over x of |x − y|²/(2τ) + χ(x) with χ its
/// Kantorovich potential: far from where the mass is, the parabolas are all that matters (Gaussian tails beyond a jump, the way over a valley).
/// Two stand-ins for χ: that of a density near equilibrium, −T log(ρₙ/π); and, for steep V, the density first moved by the proximal map of V and then
/// spread without V.
/// </summary>
internal sealed class QuantileGuess
{
    private readonly EquilibriumProfile profile;
    private readonly Grid grid;
    private readonly CTransform transform;
    private readonly double[] potential;
    private readonly double[] envelope;
    private readonly double[] mass;

    public QuantileGuess(EquilibriumProfile profile)
    {
        this.profile = profile;
        grid = new Grid(profile.Axis);
        transform = new CTransform(grid, 1, WorkerTeam.Alone);
        potential = new double[profile.Axis.Cells];
        envelope = new double[profile.Axis.Cells];
        mass = new double[profile.Axis.Cells];
    }

    /// <summary>Moves the solver's nodes to a guess.</summary>
    /// <param name="solver">Its masses are kept; its nodes are moved.</param>
    /// <param name="density">ρₙ, as cell averages.</param>
    /// <param name="step">τ times the mobility.</param>
    /// <param name="driftFirst">Whether the density is moved by V first.</param>
    public void MoveNodes(QuantileNewton solver, ReadOnlySpan<double> density, double step, bool driftFirst)
    {
        var temperature = profile.Temperature;
        if (driftFirst)
            Drift(density, step);
        else
            density.CopyTo(mass);
        for (var i = 0; i < potential.Length; i++)
        {
            potential[i] = mass[i] > 0
                ? temperature * ((driftFirst ? 0 : EquilibriumLog(i)) - Math.Log(mass[i]))
                : double.PositiveInfinity;
        }

        transform.SetTime(step);
        transform.Apply(potential, envelope);
        var highest = double.NegativeInfinity;
        for (var i = 0; i < mass.Length; i++)
        {
            mass[i] = (driftFirst ? 0 : EquilibriumLog(i)) - envelope[i] / temperature;
            highest = Math.Max(highest, mass[i]);
        }

        for (var i = 0; i < mass.Length; i++)
            mass[i] = Math.Exp(Math.Max(mass[i] - highest, -600));
        SpanKernels.Scale(mass, 1 / SpanKernels.Sum(mass));
        Fill(solver, profile.Axis.IsPeriodic ? StartOnCircle(density, solver.Ends[0]) : 0);
    }

    private double EquilibriumLog(int cell) => profile.Table[EquilibriumProfile.Stride * cell + 2];

    // Mass of each cell after y + τV′(y) = x: the cell takes what lay between the origins of its edges. Where V is too concave for the step the map
    // folds; the origins are then kept in order.
    private void Drift(ReadOnlySpan<double> density, double step)
    {
        var cells = mass.Length;
        var width = profile.Axis.Width;
        var origin = OriginOf(0, step);
        for (var i = 0; i < cells; i++)
        {
            var next = Math.Max(OriginOf(i + 1, step), origin);
            mass[i] = MassBetween(density, origin / width, next / width);
            origin = next;
        }
    }

    // Counted from the lower end of the axis; on a circle it may lie beyond the ends.
    private double OriginOf(int edge, double step)
    {
        var axis = profile.Axis;
        if (!axis.IsPeriodic && (edge == 0 || edge == axis.Cells))
            return edge * axis.Width;
        var slope = -profile.Temperature * (EquilibriumLog(profile.Wrap(edge)) - EquilibriumLog(profile.Wrap(edge - 1))) / axis.Width;
        var origin = edge * axis.Width + step * slope;
        return axis.IsPeriodic ? origin : Math.Clamp(origin, 0, axis.Interval.Length);
    }

    private double MassBetween(ReadOnlySpan<double> density, double from, double to)
    {
        var sum = 0.0;
        // A circle is gone round once at most: folds may ask for more.
        to = Math.Min(to, from + density.Length);
        for (var cell = (int)Math.Floor(from); cell < to; cell++)
            sum += density[Math.Clamp(profile.Wrap(cell), 0, density.Length - 1)] * (Math.Min(to, cell + 1) - Math.Max(from, cell));
        return sum;
    }

    // Where the lowest node goes: the best cut of the circle says which mass of the guess belongs to which of the density.
    private double StartOnCircle(ReadOnlySpan<double> density, double lowest)
    {
        var axis = profile.Axis;
        var from = new Density(grid, density.ToArray());
        var to = new Density(grid, mass);
        var cut = CircleTransport.BestCut(from, to, out _);
        var turns = Math.Floor(lowest / axis.Interval.Length);
        var level = new QuantileFunction(from).MassBelow(axis.Interval.From + lowest - turns * axis.Interval.Length) - cut;
        var turn = Math.Floor(level);
        return new QuantileFunction(to).Position(level - turn) - axis.Interval.From + (turns + turn) * axis.Interval.Length;
    }

    // Pours the parcels into the cells from both ends, so that both tails keep their relative accuracy; they meet where half the mass is spent.
    private void Fill(QuantileNewton solver, double lowest)
    {
        var count = solver.Count;
        var width = profile.Axis.Width;
        var cell = profile.CellOf(lowest);
        var share = lowest / width - cell;
        var left = mass[profile.Wrap(cell)] * (1 - share);
        var position = lowest;
        var spent = 0.0;
        var middle = 0;
        var upperCell = profile.Axis.IsPeriodic ? cell + mass.Length : mass.Length - 1;
        var upperLeft = profile.Axis.IsPeriodic ? mass[profile.Wrap(cell)] * share : mass[^1];
        for (; middle < count - 1; middle++)
        {
            var parcel = solver.Mass[solver.PlaceOf(middle)];
            if (spent + parcel > 0.5 && middle > 0)
                break;
            spent += parcel;
            var gap = Pour(parcel, ref cell, ref left, 1) * width;
            solver.Gap[solver.PlaceOf(middle)] = gap;
            position += gap;
        }

        var upper = lowest + profile.Axis.Interval.Length;
        for (var j = count - 1; j > middle; j--)
        {
            var gap = Pour(solver.Mass[solver.PlaceOf(j)], ref upperCell, ref upperLeft, -1) * width;
            solver.Gap[solver.PlaceOf(j)] = gap;
            upper -= gap;
        }

        // What the two sides leave to the parcel between them; never less than a share of its own need.
        var need = solver.Mass[solver.PlaceOf(middle)] / mass[profile.Wrap(profile.CellOf(position))] * width;
        solver.Gap[solver.PlaceOf(middle)] = Math.Max(upper - position, 0.1 * need);
        solver.PlaceEnds(lowest);
    }

    // Width in cells that holds the given mass, going on from a cell with some of its mass left.
    private double Pour(double parcel, ref int cell, ref double left, int direction)
    {
        var width = 0.0;
        while (parcel > left && (profile.Axis.IsPeriodic || (cell + direction >= 0 && cell + direction < mass.Length)))
        {
            width += left / mass[profile.Wrap(cell)];
            parcel -= left;
            cell += direction;
            left = mass[profile.Wrap(cell)];
        }

        var part = Math.Min(parcel, left);
        left -= part;
        return width + Math.Max(part, 1e-3 * parcel) / mass[profile.Wrap(cell)];
    }
}
