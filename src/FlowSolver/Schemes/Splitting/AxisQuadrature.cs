using FlowSolver.Grids;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// Points and weights that carry the mass of a density along one axis through a map that is smooth except at some breakpoints. Immutable.
/// </summary>
/// <remarks>
/// Where the map is smooth the cell centres with equal weights (the trapezoidal rule) are accurate beyond all powers of the cell width. Around
/// each breakpoint the weights of the centres fade out by a smooth window and those of Gauss points between the breakpoints take over; the density at the Gauss points is
/// interpolated, and scaled so that the mass under the window is that of the centres. All weights are positive.
/// </remarks>
internal sealed class AxisQuadrature
{
    // The window falls from 1 to 0 like a normal distribution, 5.6 of its deviations from the breakpoint. The trapezoidal rule sees the product of the window and noise of deviation σ, both in cells,
    // as a normal density of variance 1/(1/w² + 1/σ²): for w = 2.5 and σ = 1.07 its error is exp(−2π²·0.9) = 1e-8 of the mass that the window moves.
    private const double Deviations = 5.6;
    private static readonly double[] GaussPoints = [-0.8611363115940526, -0.3399810435848563, 0.3399810435848563, 0.8611363115940526];
    private static readonly double[] GaussWeights = [0.3478548451374538, 0.6521451548625461, 0.6521451548625461, 0.3478548451374538];

    private readonly double[] extraFactor;
    private readonly double[] extraPlace;
    private readonly (int FirstCell, int LastCell, int FirstExtra, int LastExtra)[] clusters;

    /// <summary>Lays the points.</summary>
    /// <param name="axis">The axis.</param>
    /// <param name="breakpoints">Places where the map is not smooth.</param>
    /// <param name="fade">w, the deviation of the windows' fall in cells. Wider is more accurate and has more points.</param>
    public AxisQuadrature(Axis axis, IReadOnlyList<double> breakpoints, double fade)
    {
        var reach = (int)Math.Ceiling(2 * Deviations * fade);
        Cells = axis.Cells;
        IsPeriodic = axis.IsPeriodic;
        CellFactor = new double[Cells];
        CellFactor.AsSpan().Fill(1);
        var positions = new List<double>(axis.Centers());
        var factors = new List<double>();
        var places = new List<double>();
        var runs = new List<(int, int, int, int)>();
        var marked = new bool[Cells];
        foreach (var breakpoint in breakpoints)
        {
            var cell = (int)Math.Floor((breakpoint - axis.Interval.From) / axis.Width);
            for (var k = cell - reach; k <= cell + reach; k++)
            {
                if ((uint)k < (uint)Cells)
                    marked[k] = true;
                else if (IsPeriodic)
                    marked[DensityInterpolation.Wrap(k, Cells, true)] = true;
            }
        }

        // Windows go round a circle, and at a wall they are even like the density, or the centres would see an edge there.
        var (from0, to0) = (axis.Interval.From, axis.Interval.To);
        var centers = IsPeriodic
            ? breakpoints.SelectMany(b => new[] { b, b - axis.Interval.Length, b + axis.Interval.Length })
            : breakpoints.SelectMany(b => b == from0 || b == to0 ? [b] : new[] { b, 2 * from0 - b, 2 * to0 - b });
        double[] windows = [.. centers];

        double Window(double position)
        {
            var outside = 1.0;
            foreach (var center in windows)
                outside *= 1 - 0.5 * MathNet.Numerics.SpecialFunctions.Erfc((Math.Abs(position - center) / axis.Width / fade - Deviations) / Math.Sqrt(2));
            return 1 - outside;
        }

        for (var cell = 0; cell < Cells; cell++)
        {
            if (!marked[cell])
                continue;
            var (firstCell, firstExtra) = (cell, factors.Count);
            for (; cell < Cells && marked[cell]; cell++)
            {
                CellFactor[cell] = 1 - Window(axis.Center(cell));
                var from = axis.Edge(cell);
                var end = axis.Edge(cell + 1);
                foreach (var to in breakpoints.Where(b => b > from && b < end).Order().Append(end))
                {
                    for (var g = 0; g < GaussPoints.Length && to - from > 1e-12 * axis.Width; g++)
                    {
                        var position = 0.5 * (from + to) + 0.5 * (to - from) * GaussPoints[g];
                        positions.Add(position);
                        places.Add((position - axis.Interval.From) / axis.Width - 0.5);
                        factors.Add(0.5 * (to - from) / axis.Width * GaussWeights[g] * Window(position));
                    }

                    from = to;
                }
            }

            runs.Add((firstCell, cell, firstExtra, factors.Count));
        }

        Positions = [.. positions];
        extraFactor = [.. factors];
        extraPlace = [.. places];
        clusters = [.. runs];
    }

    /// <summary>Cells of the axis.</summary>
    public int Cells { get; }

    /// <summary>Circle or walls.</summary>
    public bool IsPeriodic { get; }

    /// <summary>Cell centres, then the Gauss points.</summary>
    public double[] Positions { get; }

    /// <summary>Share of the mass of a cell that its centre carries.</summary>
    public double[] CellFactor { get; }

    /// <summary>Number of Gauss points.</summary>
    public int Extras => extraFactor.Length;

    /// <summary>Whether centres carry everything.</summary>
    public bool IsPlain => extraFactor.Length == 0;

    /// <summary>Writes what the Gauss points carry, in units of density times one cell width.</summary>
    /// <param name="line">Densities in the cells, <paramref name="stride"/> apart, from index 0.</param>
    /// <param name="stride">Distance between neighbours.</param>
    /// <param name="extras">Receives the values, <paramref name="stride"/> apart, from index 0.</param>
    public void WriteExtras(ReadOnlySpan<double> line, int stride, Span<double> extras)
    {
        foreach (var (firstCell, lastCell, firstExtra, lastExtra) in clusters)
        {
            var wanted = 0.0;
            for (var cell = firstCell; cell < lastCell; cell++)
                wanted += (1 - CellFactor[cell]) * line[cell * stride];
            var found = 0.0;
            for (var e = firstExtra; e < lastExtra; e++)
            {
                var value = wanted > 0 ? extraFactor[e] * DensityInterpolation.Evaluate(line, Cells, stride, IsPeriodic, extraPlace[e]) : 0;
                extras[e * stride] = value;
                found += value;
            }

            var scale = found > 0 ? wanted / found : 0;
            for (var e = firstExtra; e < lastExtra; e++)
                extras[e * stride] *= scale;
        }
    }
}
