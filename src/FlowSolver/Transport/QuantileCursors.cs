using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Walks along a quantile function piece by piece. On each piece the mass coordinate runs from Begin to End and the position from From to To,
/// linearly. On a circle the walk goes on without end: after one turn mass is higher by 1 and position by the circumference.
/// </summary>
internal interface IQuantileCursor
{
    DoubleDouble Begin { get; }

    DoubleDouble End { get; }

    double From { get; }

    double To { get; }

    /// <summary>From minus the To of the piece before: the gap that holds no mass.</summary>
    double Jump { get; }

    void MoveNext();
}

/// <summary>The pieces of a density that is constant in each cell: one piece a cell that holds mass.</summary>
internal ref struct GridQuantileCursor : IQuantileCursor
{
    private readonly ReadOnlySpan<double> values;
    private readonly double start;
    private readonly double width;
    private readonly double circumference;
    private readonly DoubleDouble shift;
    private readonly DoubleDouble inverseTotal;
    private readonly int firstCell;
    private readonly int lastCell;
    private DoubleDouble sum;
    private double turn;
    private int cell;

    /// <summary>Stands on the piece that holds mass coordinate 0 (and what follows it).</summary>
    /// <param name="values">Cell averages; entries below 0 count as 0. Need not be normalised.</param>
    /// <param name="axis">The axis.</param>
    /// <param name="shift">Added to every mass coordinate; only on a circle, where it is the cut.</param>
    public GridQuantileCursor(ReadOnlySpan<double> values, Axis axis, double shift = 0)
    {
        this.values = values;
        start = axis.Interval.From;
        width = axis.Width;
        circumference = axis.Interval.Length;
        this.shift = shift;
        DoubleDouble total = 0;
        firstCell = -1;
        for (var i = 0; i < values.Length; i++)
        {
            if (!(values[i] > 0))
            {
                if (double.IsNaN(values[i]))
                    throw new ArgumentException($"The density was not a number in cell {i}; it must be finite and not below 0.");
                continue;
            }

            total += values[i];
            if (firstCell < 0)
                firstCell = i;
            lastCell = i;
        }

        if (!(total.High > 0) || !double.IsFinite(total.High))
            throw new ArgumentException($"The sum of the density's values was {total.High}; it must be finite and above 0.");
        inverseTotal = DoubleDouble.Reciprocal(total);
        turn = -Math.Ceiling(shift);
        Begin = this.shift + turn;
        sum = 0;
        cell = firstCell;
        To = Edge(lastCell + 1) + (turn - 1) * circumference;
        Load();
        while (!(End > 0))
            MoveNext();
    }

    public DoubleDouble Begin { get; private set; }

    public DoubleDouble End { get; private set; }

    public double From { get; private set; }

    public double To { get; private set; }

    public double Jump { get; private set; }

    public void MoveNext()
    {
        Begin = End;
        if (cell == lastCell)
        {
            turn++;
            sum = 0;
            cell = firstCell;
        }
        else
        {
            do
                cell++;
            while (!(values[cell] > 0));
        }

        Load();
    }

    private void Load()
    {
        From = Edge(cell) + turn * circumference;
        Jump = From - To;
        To = Edge(cell + 1) + turn * circumference;
        sum += values[cell];
        // The last piece ends at a whole turn exactly: rounding in the quotient may not leave a sliver behind it.
        End = cell == lastCell ? shift + (turn + 1) : sum * inverseTotal + (shift + turn);
    }

    private readonly double Edge(int index) => index == values.Length ? start + circumference : start + index * width;
}

/// <summary>The pieces of n samples of weight 1/n each: one piece a sample, all of it at one position.</summary>
internal ref struct SampleQuantileCursor : IQuantileCursor
{
    private readonly ReadOnlySpan<double> samples;
    private readonly double circumference;
    private readonly DoubleDouble shift;
    private double turn;
    private int index;

    /// <summary>Stands on the sample that holds mass coordinate 0.</summary>
    /// <param name="samples">Ascending positions; on a circle all within one turn.</param>
    /// <param name="circumference">Length of the circle; any value on a line.</param>
    /// <param name="shift">Added to every mass coordinate; only on a circle, where it is the cut.</param>
    public SampleQuantileCursor(ReadOnlySpan<double> samples, double circumference, double shift = 0)
    {
        this.samples = samples;
        this.circumference = circumference;
        this.shift = shift;
        turn = -Math.Ceiling(shift);
        Begin = this.shift + turn;
        index = (int)Math.Clamp(Math.Floor(-Begin.High * samples.Length) - 1, 0, samples.Length - 1);
        To = (index == 0 ? samples[^1] - circumference : samples[index - 1]) + turn * circumference;
        if (index > 0)
            Begin = DoubleDouble.Ratio(index, samples.Length) + (this.shift + turn);
        Load();
        while (!(End > 0))
            MoveNext();
    }

    public DoubleDouble Begin { get; private set; }

    public DoubleDouble End { get; private set; }

    public double From { get; private set; }

    public double To { get; private set; }

    public double Jump { get; private set; }

    public void MoveNext()
    {
        Begin = End;
        if (++index == samples.Length)
        {
            turn++;
            index = 0;
        }

        Load();
    }

    private void Load()
    {
        From = samples[index] + turn * circumference;
        Jump = From - To;
        To = From;
        End = index == samples.Length - 1 ? shift + (turn + 1) : DoubleDouble.Ratio(index + 1, samples.Length) + (shift + turn);
    }
}
