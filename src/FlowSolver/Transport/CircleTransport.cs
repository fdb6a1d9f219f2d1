using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Wasserstein-2 distance and optimal map between laws on a circle, exact up to rounding.
/// </summary>
/// <remarks>
/// W2² is the least value over the cut θ of C(θ) = ∫₀¹ (F⁻¹(u) − G⁻¹(u − θ))² du with quantile functions continued over all turns; C is convex in θ
/// (J. Delon, J. Salomon, A. Sobolevski, Fast transport optimization for Monge costs on the circle, SIAM J. Appl. Math. 70 (2010) 2239-2258). C and
/// its derivatives come from one merge of the breakpoints, as on the line; the cut is found by Newton's method kept inside a shrinking bracket, and
/// the search ends when the tangents at the ends of the bracket prove that no other cut is better by more than rounding. Two sets of samples, where
/// C has corners, are searched over the finitely many cuts that can be best, in whole numbers.
/// Densities and samples as in <see cref="LineTransport"/>; samples must lie within one turn.
/// </remarks>
public static class CircleTransport
{
    private const double RelativeTolerance = 1e-14;
    private const int MostEvaluations = 200;

    /// <summary>W2 between two densities on the same circle, in units of length.</summary>
    /// <exception cref="ArgumentException">A density is two-dimensional, not a number or without mass, or the circles differ.</exception>
    public static double Distance(Density first, Density second)
    {
        BestCut(first, second, out var cost);
        return Math.Sqrt(cost);
    }

    /// <summary>W2 between samples of equal weight and a density.</summary>
    /// <param name="samples">Positions in ascending order, at least one, within the axis.</param>
    /// <param name="density">The density.</param>
    /// <exception cref="ArgumentException">The samples are empty, not ascending or outside the circle, or the density is not one of one dimension.</exception>
    public static double Distance(ReadOnlySpan<double> samples, Density density)
    {
        ArgumentNullException.ThrowIfNull(density);
        RequireOneTurn(samples, density.Grid.X.Interval.Length);
        var search = new CutSearch();
        while (search.Continue())
        {
            var a = LineTransport.Cursor(density);
            var b = new SampleQuantileCursor(samples, density.Grid.X.Interval.Length, search.Cut);
            var sink = new CutSink();
            QuantileMerge.Walk(ref a, ref b, ref sink, density.Grid.X.Interval.Length);
            search.Take(sink);
        }

        return Math.Sqrt(search.BestCost);
    }

    /// <summary>W2 between two sets of samples, each of equal weights; the sets may differ in size.</summary>
    /// <param name="first">Positions in ascending order, at least one, within one turn.</param>
    /// <param name="second">Positions in ascending order, at least one, within the same turn.</param>
    /// <param name="circumference">Length of the circle.</param>
    /// <exception cref="ArgumentException">A set is empty, not ascending or spans more than a turn.</exception>
    public static double Distance(ReadOnlySpan<double> first, ReadOnlySpan<double> second, double circumference)
    {
        Require.Positive(circumference);
        RequireOneTurn(first, circumference);
        RequireOneTurn(second, circumference);

        // Mass in units of 1/lcm: both sets then have whole breakpoints, and C is linear between whole cuts.
        var divisor = GreatestCommonDivisor(first.Length, second.Length);
        var unitsFirst = (long)second.Length / divisor;
        var unitsSecond = (long)first.Length / divisor;
        var turn = unitsFirst * first.Length;
        var (low, high) = (-turn - unitsFirst, turn + unitsFirst);
        while (high - low > 1)
        {
            var middle = low + (high - low) / 2;
            if (SampleCost(first, second, circumference, unitsFirst, unitsSecond, middle)
                <= SampleCost(first, second, circumference, unitsFirst, unitsSecond, middle + 1))
                high = middle;
            else
                low = middle;
        }

        return Math.Sqrt(Math.Min(
            SampleCost(first, second, circumference, unitsFirst, unitsSecond, low),
            SampleCost(first, second, circumference, unitsFirst, unitsSecond, high)));
    }

    /// <summary>
    /// The point of the shortest path between two densities on the same circle (displacement interpolation), on the first density's grid.
    /// </summary>
    /// <param name="from">The density at fraction 0.</param>
    /// <param name="to">The density at fraction 1.</param>
    /// <param name="fraction">0 … 1.</param>
    public static Density Interpolate(Density from, Density to, double fraction)
    {
        Require.That(fraction is >= 0 and <= 1, $"fraction was {fraction}; it must be from 0 to 1.");
        var cut = BestCut(from, to, out _);
        var a = LineTransport.Cursor(from);
        var b = LineTransport.Cursor(to, cut);
        var sink = new DepositSink(from.Grid.X, fraction);
        QuantileMerge.Walk(ref a, ref b, ref sink);
        return sink.Result(from.Grid);
    }

    /// <summary>The cut θ at which mass u of the first law goes to mass u − θ of the second, and W2² in units of length².</summary>
    internal static double BestCut(Density first, Density second, out double cost)
    {
        ArgumentNullException.ThrowIfNull(first);
        ArgumentNullException.ThrowIfNull(second);
        Require.That(first.Grid.X.Interval == second.Grid.X.Interval, "The two densities were on different circles; they must be on the same.");
        var search = new CutSearch();
        while (search.Continue())
        {
            var a = LineTransport.Cursor(first);
            var b = LineTransport.Cursor(second, search.Cut);
            var sink = new CutSink();
            QuantileMerge.Walk(ref a, ref b, ref sink, first.Grid.X.Interval.Length);
            search.Take(sink);
        }

        cost = search.BestCost;
        return search.BestCut;
    }

    private static void RequireOneTurn(ReadOnlySpan<double> samples, double circumference)
    {
        LineTransport.RequireAscending(samples);
        if (samples[^1] - samples[0] > circumference)
            throw new ArgumentException($"The samples spanned {samples[^1] - samples[0]}; they must lie within one turn of {circumference}.");
    }

    private static int GreatestCommonDivisor(int a, int b)
    {
        while (b != 0)
            (a, b) = (b, a % b);
        return a;
    }

    private static double SampleCost(
        ReadOnlySpan<double> first, ReadOnlySpan<double> second, double circumference, long unitsFirst, long unitsSecond, long cut)
    {
        var turnUnits = unitsFirst * first.Length;
        // Sample j of the second set holds masses from j·unitsSecond + cut on; find the one that holds mass 0.
        var offset = -cut;
        var turn = (long)Math.Floor((double)offset / turnUnits);
        while (turn * turnUnits > offset)
            turn--;
        while ((turn + 1) * turnUnits <= offset)
            turn++;
        var inside = offset - turn * turnUnits;
        var j = (int)(inside / unitsSecond);
        var endSecond = unitsSecond - inside % unitsSecond;
        var i = 0;
        var endFirst = unitsFirst;
        var mass = 0L;
        var sink = new CostSink();
        while (true)
        {
            var next = Math.Min(endFirst, endSecond);
            sink.Piece(next - mass, new NearPosition(first[i], 0), new NearPosition(first[i], 0),
                new NearPosition(second[j], turn * circumference), new NearPosition(second[j], turn * circumference));
            mass = next;
            if (mass == turnUnits)
                return sink.Cost / turnUnits;
            if (mass == endFirst)
            {
                i++;
                endFirst += unitsFirst;
            }

            if (mass == endSecond)
            {
                if (++j == second.Length)
                {
                    j = 0;
                    turn++;
                }

                endSecond += unitsSecond;
            }
        }
    }

    /// <summary>Least value of a convex function from values and slopes: Newton inside a bracket, ended by the tangents' lower bound.</summary>
    private struct CutSearch
    {
        private double low = -1;
        private double high = 1;
        private double lowCost = double.NaN;
        private double lowSlope = double.NaN;
        private double highCost = double.NaN;
        private double highSlope = double.NaN;
        private int evaluations;
        private bool done;

        public CutSearch() { }

        /// <summary>Where to evaluate next.</summary>
        public double Cut { get; private set; } = 0;

        public double BestCut { get; private set; } = 0;

        public double BestCost { get; private set; } = double.PositiveInfinity;

        public readonly bool Continue() => !done && evaluations < MostEvaluations;

        public void Take(in CutSink found)
        {
            evaluations++;
            if (found.Cost < BestCost)
            {
                BestCost = found.Cost;
                BestCut = Cut;
            }

            var slope = found.Derivative;
            if (slope == 0)
            {
                done = true;
                return;
            }

            if (slope < 0)
                (low, lowCost, lowSlope) = (Cut, found.Cost, slope);
            else
                (high, highCost, highSlope) = (Cut, found.Cost, slope);
            if (LowerBound() >= BestCost * (1 - RelativeTolerance) || high - low <= 1e-30)
            {
                done = true;
                return;
            }

            // Newton, carried a little too far once it is close, so that both ends of the bracket come to the minimum.
            var newton = -slope / found.SecondDerivative;
            var width = high - low;
            var near = Math.Abs(newton) < 0.01 * width;
            var next = Cut + (near ? 2 * newton : newton);
            var middle = low + 0.5 * width;
            // Every third evaluation halves the bracket whatever Newton says: corners of C mislead it.
            Cut = next > low && next < high && evaluations % 3 != 0 ? next : middle;
            done = Cut <= low || Cut >= high;
        }

        private readonly double LowerBound()
        {
            var width = high - low;
            if (double.IsNaN(lowSlope))
                return highCost - highSlope * width;
            if (double.IsNaN(highSlope))
                return lowCost + lowSlope * width;
            // Where the two tangents meet: lowCost + lowSlope·t = highCost − highSlope·(width − t).
            var t = Math.Clamp((highCost - highSlope * width - lowCost) / (lowSlope - highSlope), 0, width);
            return lowCost + lowSlope * t;
        }
    }
}
