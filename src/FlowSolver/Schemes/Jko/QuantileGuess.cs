using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// A first guess of a step whose tails are right to leading order: with φ = T log(ρₙ/π), the guess is π exp(−ψ/T), ψ(y) = min over x of
/// |x − y|²/(2τ) − φ(x). A step's own density has this form with another function in the place of −φ (its Kantorovich potential), which is all that
/// matters far from where the mass is: Gaussian tails beyond a jump, the way over a valley.
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

    /// <summary>Moves the solver's nodes to the guess.</summary>
    /// <param name="solver">Its masses are kept; its nodes are moved.</param>
    /// <param name="density">ρₙ, as cell averages.</param>
    /// <param name="step">τ times the mobility.</param>
    public void MoveNodes(QuantileNewton solver, ReadOnlySpan<double> density, double step)
    {
        var temperature = profile.Temperature;
        for (var i = 0; i < potential.Length; i++)
        {
            potential[i] = density[i] > 0
                ? temperature * (profile.Table[EquilibriumProfile.Stride * i + 2] - Math.Log(density[i]))
                : double.PositiveInfinity;
        }

        transform.SetTime(step);
        transform.Apply(potential, envelope);
        var highest = double.NegativeInfinity;
        for (var i = 0; i < mass.Length; i++)
        {
            mass[i] = profile.Table[EquilibriumProfile.Stride * i + 2] - envelope[i] / temperature;
            highest = Math.Max(highest, mass[i]);
        }

        for (var i = 0; i < mass.Length; i++)
            mass[i] = Math.Exp(Math.Max(mass[i] - highest, -600));
        SpanKernels.Scale(mass, 1 / SpanKernels.Sum(mass));
        Fill(solver, profile.Axis.IsPeriodic ? StartOnCircle(density, solver.Ends[0]) : 0);
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
