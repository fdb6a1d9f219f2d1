using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// The equilibrium of a one-dimensional grid problem between the cell centres: a continuous, positive density whose mass in each cell is that of
/// <see cref="GridProblem.Equilibrium"/> to the last bit. Immutable.
/// </summary>
/// <remarks>
/// Within a cell the cumulative mass is a rational quadratic that takes given values and slopes at both edges (J. A. Gregory, R. Delbourgo,
/// Piecewise rational quadratic interpolation to monotonic data, IMA J. Numer. Anal. 2 (1982) 123-130; from memory), in the coordinate s of an exponential:
/// s(t) = (1 − e^(−zt))/(1 − e^(−z)) with t ∈ [0, 1] and z the log of the densities' ratio at the edges; s = t where |z| is below 0.1. With edge
/// densities l, r with respect to s in units of the cell's mean, D(s) = 1 + (l + r − 2) s(1 − s),
/// mass between s₁ and s₂ = (s₂ − s₁) B(s₁, s₂)/(D(s₁) D(s₂)), B(p, q) = l(1−p)(1−q) + (p + q − 2pq) + r p q, density = s′(t) B(s, s)/D(s)².
/// An exponential comes out exactly, so that a steep cell puts no ripple on the force; every term is positive, whatever the contrast; and nothing
/// cancels however close t₁ and t₂ are. Edge densities are e^(−V/T) at the edge, corrected to fourth order for the cells' means being centre values,
/// exactly so for an exponential. Levels are kept as logarithms: cells at a height of thousands of T do no harm.
/// </remarks>
internal sealed class EquilibriumProfile
{
    /// <summary>
    /// Entries of <see cref="Table"/> for one cell: l, r, log of the level, level of the next cell over this one, z, s′(0), 1/(1 − e^(−z)).
    /// </summary>
    public const int Stride = 8;

    /// <summary>Where z·(t₂ − t₁) is below, s₂ − s₁ comes from a series.</summary>
    public const double LargestSeriesArgument = 0.25;

    private const double LargestEdgeLog = 30;
    private const double LargestStepLog = 600;
    private const double LeastSteepness = 0.1;
    private const double LargestCurvatureCorrection = 0.05;

    public EquilibriumProfile(GridProblem problem)
    {
        ArgumentNullException.ThrowIfNull(problem);
        Axis = problem.Grid.X;
        Temperature = problem.Problem.Temperature;
        var potential = problem.CellPotential;
        var cells = Axis.Cells;
        var least = problem.LeastPotential;

        var edges = new double[cells + 1];
        for (var i = 0; i <= cells; i++)
            edges[i] = Axis.Edge(i);
        var edgePotential = new double[cells + 1];
        problem.Problem.Potential.Value(edges, [], edgePotential);

        double At(int cell) => Axis.IsPeriodic ? potential[(cell + cells) % cells] : potential[cell];
        var edgeLog = new double[cells + 1];
        for (var edge = 0; edge <= cells; edge++)
        {
            var inside = Axis.IsPeriodic || (edge > 0 && edge < cells);
            double mean, step, bend = 0;
            if (inside)
            {
                mean = 0.5 * (At(edge - 1) + At(edge));
                step = At(edge) - At(edge - 1);
                if (Axis.IsPeriodic || (edge > 1 && edge < cells - 1))
                    bend = At(edge + 1) - At(edge) - (At(edge - 1) - At(edge - 2));
            }
            else
            {
                var (wall, next) = edge == 0 ? (At(0), At(1)) : (At(cells - 1), At(cells - 2));
                mean = wall + 0.5 * (wall - next);
                step = wall - next;
            }

            var value = edgePotential[Axis.IsPeriodic ? edge % cells : edge];
            if (!double.IsFinite(value))
                value = mean;
            var z = 0.5 * step / Temperature;
            edgeLog[edge] = -(value - least) / Temperature - LogSinhRatio(z)
                + Math.Clamp(bend / (48 * Temperature), -LargestCurvatureCorrection, LargestCurvatureCorrection);
        }

        LogMass = problem.LogPartition + least / Temperature;
        Table = new double[Stride * cells];
        MinimumCurvature = double.PositiveInfinity;
        for (var cell = 0; cell < cells; cell++)
        {
            var level = -(potential[cell] - least) / Temperature;
            var steepness = Math.Clamp(edgeLog[cell] - edgeLog[cell + 1], -LargestStepLog, LargestStepLog);
            double startSlope = 1, endSlope = 1, scale = 0;
            if (Math.Abs(steepness) < LeastSteepness)
            {
                steepness = 0;
            }
            else
            {
                scale = -1 / (Math.Exp(-steepness) - 1);
                startSlope = steepness * scale;
                endSlope = startSlope * Math.Exp(-steepness);
            }

            Table[Stride * cell] = Math.Exp(Math.Clamp(edgeLog[cell] - level - Math.Log(startSlope), -LargestEdgeLog, LargestEdgeLog));
            Table[Stride * cell + 1] = Math.Exp(Math.Clamp(edgeLog[cell + 1] - level - Math.Log(endSlope), -LargestEdgeLog, LargestEdgeLog));
            Table[Stride * cell + 4] = steepness;
            Table[Stride * cell + 5] = startSlope;
            Table[Stride * cell + 6] = scale;
            Table[Stride * cell + 2] = level;
            if (Axis.IsPeriodic || cell < cells - 1)
                Table[Stride * cell + 3] = Math.Exp(Math.Clamp((potential[cell] - At(cell + 1)) / Temperature, -LargestStepLog, LargestStepLog));
            if (Axis.IsPeriodic || (cell > 0 && cell < cells - 1))
            {
                var curvature = (At(cell + 1) - 2 * potential[cell] + At(cell - 1)) / (Axis.Width * Axis.Width);
                if (curvature < MinimumCurvature)
                    (MinimumCurvature, MinimumCurvatureCell) = (curvature, cell);
            }
        }
    }

    public Axis Axis { get; }

    public double Temperature { get; }

    /// <summary>Numbers of each cell; see <see cref="Stride"/>. The level is log of the cell's mean, relative to the highest cell.</summary>
    public double[] Table { get; }

    /// <summary>log of the mass of all cells, in the units of the levels.</summary>
    public double LogMass { get; }

    /// <summary>Least second difference of V over the squared cell width; at a kink it grows as the cells shrink.</summary>
    public double MinimumCurvature { get; }

    /// <summary>Where it is.</summary>
    public int MinimumCurvatureCell { get; }

    /// <summary>The cell of the table for a cell number that may lie beyond the ends of a circle.</summary>
    public int Wrap(int cell)
    {
        var inside = cell % Axis.Cells;
        return inside < 0 ? inside + Axis.Cells : inside;
    }

    /// <summary>The cell of a position counted from the lower end of the axis; on a circle positions beyond the ends give numbers beyond the ends.</summary>
    public int CellOf(double position)
    {
        var cell = (int)Math.Floor(position / Axis.Width);
        return Axis.IsPeriodic ? cell : Math.Clamp(cell, 0, Axis.Cells - 1);
    }

    /// <summary>The mass between places in two different cells, in units that neither overflow nor vanish.</summary>
    /// <param name="first">Cell of the lower place.</param>
    /// <param name="from">Lower place in it, 0 … 1.</param>
    /// <param name="last">Cell of the upper place.</param>
    /// <param name="to">Upper place in it.</param>
    /// <param name="width">Distance between the two places in units of length.</param>
    /// <returns>The mass is Mass·e^Level; the mean of the first cell is LowerScale·e^Level and that of the last UpperScale·e^Level.</returns>
    public (double Mass, double Level, double LowerScale, double UpperScale) MassAcross(int first, double from, int last, double to, double width)
    {
        var lower = Stride * Wrap(first);
        var upper = Stride * Wrap(last);
        if (last == first + 1)
        {
            // The two parts add up to the width exactly; where the edge lies between hardly matters, since the density is continuous there.
            var below = Math.Clamp((1 - from) * Axis.Width, 0, width);
            var above = width - below;
            var step = Table[lower + 3];
            var mass = Axis.Width * (ShareOf(lower, from, 1, below / Axis.Width) + ShareOf(upper, 0, to, above / Axis.Width) * step);
            return (mass, Table[lower + 2], 1, step);
        }

        // Rounding at the end of a piece: the two are the same place.
        if (last < first)
            return (width * RelativeDensity(lower, from), Table[lower + 2], 1, Math.Exp(Table[upper + 2] - Table[lower + 2]));

        var level = Math.Max(Table[lower + 2], Table[upper + 2]);
        for (var cell = first + 1; cell < last; cell++)
            level = Math.Max(level, Table[Stride * Wrap(cell) + 2]);
        var lowerScale = Math.Exp(Table[lower + 2] - level);
        var upperScale = Math.Exp(Table[upper + 2] - level);
        var sum = lowerScale * ShareOf(lower, from, 1, 1 - from) + upperScale * ShareOf(upper, 0, to, to);
        for (var cell = first + 1; cell < last; cell++)
            sum += Math.Exp(Table[Stride * Wrap(cell) + 2] - level);
        return (sum * Axis.Width, level, lowerScale, upperScale);
    }

    /// <summary>Share of a cell's mass between two places.</summary>
    /// <param name="entry">The cell's place in the table.</param>
    /// <param name="from">Lower place, 0 … 1.</param>
    /// <param name="to">Upper place.</param>
    /// <param name="width">to − from, which the caller may know better than the difference.</param>
    public double ShareOf(int entry, double from, double to, double width)
    {
        var (left, right, steepness) = (Table[entry], Table[entry + 1], Table[entry + 4]);
        if (steepness == 0)
            return RationalShare(left, right, from, to, width);
        var (lower, upper) = (Math.Exp(-steepness * from), Math.Exp(-steepness * to));
        var scale = Table[entry + 6];
        var argument = steepness * width;
        var difference = Math.Abs(argument) < LargestSeriesArgument
            ? Table[entry + 5] * lower * width * SeriesFactor(argument)
            : (lower - upper) * scale;
        return RationalShare(left, right, (1 - lower) * scale, (1 - upper) * scale, difference);
    }

    /// <summary>Density at a place in units of the cell's mean.</summary>
    public double RelativeDensity(int entry, double place)
    {
        var (left, right, steepness) = (Table[entry], Table[entry + 1], Table[entry + 4]);
        var exponential = Math.Exp(-steepness * place);
        var s = steepness == 0 ? place : (1 - exponential) * Table[entry + 6];
        var denominator = Denominator(left, right, s);
        return Table[entry + 5] * exponential * (left * (1 - s) * (1 - s) + 2 * s * (1 - s) + right * s * s) / (denominator * denominator);
    }

    /// <summary>(1 − e^(−y))/y for |y| below <see cref="LargestSeriesArgument"/>.</summary>
    public static double SeriesFactor(double y)
    {
        var sum = 0.0;
        for (var k = SeriesTerms; k >= 0; k--)
            sum = sum * -y + SeriesCoefficient(k);
        return sum;
    }

    /// <summary>Number of the last term of the series.</summary>
    public const int SeriesTerms = 11;

    /// <summary>1/(k + 1)!.</summary>
    public static double SeriesCoefficient(int k)
    {
        var factorial = 1.0;
        for (var i = 2; i <= k + 1; i++)
            factorial *= i;
        return 1 / factorial;
    }

    /// <summary>(t − s) B(s, t)/(D(s) D(t)): the share of a mass between two places under a rational quadratic.</summary>
    /// <param name="left">Slope at 0 in units of the mean.</param>
    /// <param name="right">Slope at 1 in units of the mean.</param>
    /// <param name="s">Lower place, 0 … 1.</param>
    /// <param name="t">Upper place.</param>
    /// <param name="width">t − s, which the caller may know better than the difference.</param>
    public static double RationalShare(double left, double right, double s, double t, double width)
        => width * (left * (1 - s) * (1 - t) + (s + t - 2 * s * t) + right * s * t)
            / (Denominator(left, right, s) * Denominator(left, right, t));

    private static double Denominator(double left, double right, double t) => 1 + (left + right - 2) * t * (1 - t);

    /// <summary>log(sinh(z)/z): how much the mean of an exponential over a cell exceeds its centre value.</summary>
    public static double LogSinhRatio(double z)
    {
        z = Math.Abs(z);
        if (z < 0.1)
        {
            var square = z * z;
            return square / 6 * (1 - square / 30 * (1 - square * (4.0 / 63) * (1 - square * 0.075)));
        }

        return z - Math.Log(2 * z) + Math.Log(1 - Math.Exp(-2 * z));
    }
}
