using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>Spreads pieces of uniform mass over the cells of an axis; collects the displacement interpolation of a merge.</summary>
internal readonly struct DepositSink(Axis axis, double fraction) : IMergeSink
{
    private readonly double[] masses = new double[axis.Cells];

    public void Piece(double mass, NearPosition a0, NearPosition a1, NearPosition b0, NearPosition b1)
        => Spread(mass, (1 - fraction) * a0.Value + fraction * b0.Value, (1 - fraction) * a1.Value + fraction * b1.Value);

    public void JumpOfFirst(double jump, double slopeB) { }

    public void JumpOfSecond(double jump, double difference, double slopeA) { }

    public Density Result(Grid grid)
    {
        for (var i = 0; i < masses.Length; i++)
            masses[i] /= axis.Width;
        return new Density(grid, masses).Normalised();
    }

    private void Spread(double mass, double from, double to)
    {
        var (first, last) = (CellOf(from), CellOf(to));
        if (first == last || !(to > from))
        {
            masses[Place(first)] += mass;
            return;
        }

        var perLength = mass / (to - from);
        masses[Place(first)] += perLength * (EdgeOf(first + 1) - from);
        for (var cell = first + 1; cell < last; cell++)
            masses[Place(cell)] += perLength * axis.Width;
        masses[Place(last)] += perLength * (to - EdgeOf(last));
    }

    // Cells go on beyond the axis; Place brings them back to it.
    private int CellOf(double position) => (int)Math.Floor((position - axis.Interval.From) / axis.Width);

    private double EdgeOf(int cell) => axis.Interval.From + cell * axis.Width;

    private int Place(int cell)
    {
        if (!axis.IsPeriodic)
            return Math.Clamp(cell, 0, axis.Cells - 1);
        var place = cell % axis.Cells;
        return place < 0 ? place + axis.Cells : place;
    }
}
