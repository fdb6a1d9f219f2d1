using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Grids;

/// <summary>An interval cut into cells of equal width. Immutable.</summary>
public sealed record Axis
{
    /// <summary>Cuts an interval.</summary>
    /// <param name="interval">The interval.</param>
    /// <param name="cells">Number of cells, at least 4.</param>
    public Axis(Interval interval, int cells)
    {
        ArgumentNullException.ThrowIfNull(interval);
        Interval = interval;
        Cells = Require.AtLeast(cells, 4);
        Width = interval.Length / cells;
    }

    /// <summary>The interval.</summary>
    public Interval Interval { get; }

    /// <summary>Number of cells.</summary>
    public int Cells { get; }

    /// <summary>h, the width of a cell, in units of length.</summary>
    public double Width { get; }

    /// <summary>Whether the two ends are the same point.</summary>
    public bool IsPeriodic => Interval.Ends == AxisEnds.Periodic;

    /// <summary>Centre of cell <paramref name="cell"/>.</summary>
    public double Center(int cell) => Interval.From + (cell + 0.5) * Width;

    /// <summary>Lower end of cell <paramref name="cell"/>; also defined for <c>cell = Cells</c>, where it is the upper end of the axis.</summary>
    public double Edge(int cell) => cell == Cells ? Interval.To : Interval.From + cell * Width;

    /// <summary>The cell that holds a point of the interval; points at the upper end belong to the last cell.</summary>
    public int CellOf(double position) => Math.Clamp((int)((position - Interval.From) / Width), 0, Cells - 1);

    /// <summary>All centres, in order.</summary>
    public double[] Centers()
    {
        var centers = new double[Cells];
        for (var i = 0; i < centers.Length; i++)
            centers[i] = Center(i);
        return centers;
    }
}

/// <summary>
/// A uniform cell-centred grid on an interval or a rectangle. Immutable. Fields on it are flat arrays of length <see cref="CellCount"/> with x
/// fastest: cell (i, j) stands at index j·Nx + i.
/// </summary>
public sealed record Grid(Axis X, Axis? Y = null)
{
    /// <summary>1 or 2.</summary>
    public int Dimension => Y is null ? 1 : 2;

    /// <summary>Cells along x.</summary>
    public int Nx => X.Cells;

    /// <summary>Cells along y; 1 in one dimension.</summary>
    public int Ny => Y?.Cells ?? 1;

    /// <summary>Cells in all.</summary>
    public int CellCount => checked(Nx * Ny);

    /// <summary>Length or area of one cell.</summary>
    public double CellVolume => X.Width * (Y?.Width ?? 1.0);

    /// <summary>The grid with half the cells on each axis, for error estimates by halving; null when a count is odd or would fall below 4.</summary>
    public Grid? Halved()
        => X.Cells % 2 != 0 || X.Cells < 8 || (Y is not null && (Y.Cells % 2 != 0 || Y.Cells < 8))
            ? null
            : new Grid(new Axis(X.Interval, X.Cells / 2), Y is null ? null : new Axis(Y.Interval, Y.Cells / 2));

    /// <summary>Writes the centres of a row of cells: x runs along the row, y (empty in one dimension) is constant.</summary>
    /// <param name="row">Row index j.</param>
    /// <param name="x">Receives x; length <see cref="Nx"/>.</param>
    /// <param name="y">Receives y; length <see cref="Nx"/>, or empty in one dimension.</param>
    public void RowCenters(int row, Span<double> x, Span<double> y)
    {
        Require.Length(x.Length, Nx);
        for (var i = 0; i < x.Length; i++)
            x[i] = X.Center(i);
        if (Y is not null)
            y.Fill(Y.Center(row));
    }

    /// <summary>Evaluates a function at every cell centre.</summary>
    public double[] Sample(BatchFunction function)
    {
        ArgumentNullException.ThrowIfNull(function);
        var values = new double[CellCount];
        var x = new double[Nx];
        var y = new double[Y is null ? 0 : Nx];
        for (var row = 0; row < Ny; row++)
        {
            RowCenters(row, x, y);
            function(x, y, values.AsSpan(row * Nx, Nx));
        }

        return values;
    }
}

/// <summary>
/// A probability density on a grid: one value a cell, the cell's average, in units of 1/length or 1/length². Immutable by convention: the array
/// is not copied, and whoever hands it over no longer writes to it.
/// </summary>
/// <param name="Grid">The grid.</param>
/// <param name="Values">Cell averages, x fastest; length <see cref="Grids.Grid.CellCount"/>.</param>
public sealed record Density(Grid Grid, double[] Values)
{
    /// <summary>Cell averages, x fastest.</summary>
    public double[] Values { get; } = Values is not null && Values.Length == Grid.CellCount
        ? Values
        : throw new ArgumentException($"The density had {Values?.Length ?? 0} values; it must have one for each of the {Grid.CellCount} cells.");

    /// <summary>Sum of all cell masses; 1 up to rounding.</summary>
    public double Mass => SpanKernels.Sum(Values) * Grid.CellVolume;

    /// <summary>The density scaled to mass 1.</summary>
    public Density Normalised()
    {
        var scaled = (double[])Values.Clone();
        SpanKernels.Scale(scaled, 1 / Mass);
        return new Density(Grid, scaled);
    }

    /// <summary>The same density on the grid with half the cells on each axis: masses of neighbours added.</summary>
    /// <exception cref="ArgumentException"><paramref name="coarse"/> is not the halved grid.</exception>
    public Density CoarsenedTo(Grid coarse)
    {
        ArgumentNullException.ThrowIfNull(coarse);
        Require.That(coarse.Nx * 2 == Grid.Nx && (Grid.Y is null ? coarse.Y is null : coarse.Ny * 2 == Grid.Ny),
            $"The coarse grid had {coarse.Nx} x {coarse.Ny} cells; it must have half of {Grid.Nx} x {Grid.Ny} on each axis.");
        var values = new double[coarse.CellCount];
        for (var row = 0; row < coarse.Ny; row++)
        {
            for (var i = 0; i < coarse.Nx; i++)
            {
                if (Grid.Y is null)
                {
                    values[i] = 0.5 * (Values[2 * i] + Values[2 * i + 1]);
                    continue;
                }

                var lower = 2 * row * Grid.Nx + 2 * i;
                var upper = lower + Grid.Nx;
                values[row * coarse.Nx + i] = 0.25 * (Values[lower] + Values[lower + 1] + (Values[upper] + Values[upper + 1]));
            }
        }

        return new Density(coarse, values);
    }
}
