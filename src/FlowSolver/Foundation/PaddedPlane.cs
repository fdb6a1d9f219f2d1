namespace FlowSolver.Foundation;

/// <summary>
/// How a field on an nx × ny grid is laid out with a margin, so that stencils and vector loops need no branches: row j stands at
/// <see cref="Row"/>(j), x fastest, two ghost cells on each side. Immutable.
/// </summary>
/// <remarks>
/// Rows start on a multiple of 8 doubles and the distance between rows is never a power of two (which would map one column to a few lines of the
/// cache). What lies in the margin beyond the ghosts has no meaning; fields start as zeros and vector loops over whole arrays keep them finite.
/// </remarks>
public sealed class PaddedPlane
{
    private const int Margin = 8;

    /// <summary>Ghost cells on each side.</summary>
    public const int Ghosts = 2;

    /// <summary>Lays out a plane.</summary>
    /// <param name="nx">Cells along x, at least 4.</param>
    /// <param name="ny">Cells along y, at least 4.</param>
    /// <param name="wrapsX">Whether x is a circle; otherwise fields are even across the ends of x.</param>
    /// <param name="wrapsY">The same for y.</param>
    public PaddedPlane(int nx, int ny, bool wrapsX, bool wrapsY)
    {
        Nx = Require.AtLeast(nx, 4);
        Ny = Require.AtLeast(ny, 4);
        WrapsX = wrapsX;
        WrapsY = wrapsY;
        Stride = (nx + 7) / 8 * 8 + 2 * Margin;
        if ((Stride & (Stride - 1)) == 0)
            Stride += 8;
        Length = checked(Stride * (ny + 2 * Ghosts));
    }

    /// <summary>Cells along x.</summary>
    public int Nx { get; }

    /// <summary>Cells along y.</summary>
    public int Ny { get; }

    /// <summary>Whether x is a circle.</summary>
    public bool WrapsX { get; }

    /// <summary>Whether y is a circle.</summary>
    public bool WrapsY { get; }

    /// <summary>Distance between rows, in doubles.</summary>
    public int Stride { get; }

    /// <summary>Length of an array that holds a field.</summary>
    public int Length { get; }

    /// <summary>Index of cell (0, <paramref name="j"/>).</summary>
    public int Row(int j) => (j + Ghosts) * Stride + Margin;

    /// <summary>A new field of zeros.</summary>
    public double[] NewField() => new double[Length];

    /// <summary>Copies a flat field (x fastest) in; ghosts are not filled.</summary>
    public void Load(ReadOnlySpan<double> flat, Span<double> field)
    {
        Require.Length(flat.Length, Nx * Ny);
        for (var j = 0; j < Ny; j++)
            flat.Slice(j * Nx, Nx).CopyTo(field.Slice(Row(j), Nx));
    }

    /// <summary>Copies a field out to a flat one (x fastest).</summary>
    public void Store(ReadOnlySpan<double> field, Span<double> flat)
    {
        Require.Length(flat.Length, Nx * Ny);
        for (var j = 0; j < Ny; j++)
            field.Slice(Row(j), Nx).CopyTo(flat.Slice(j * Nx, Nx));
    }

    /// <summary>Fills the ghost cells, corners included: even reflection about the wall, or the other end of a circle.</summary>
    public void FillGhosts(Span<double> field)
    {
        Require.Length(field.Length, Length);
        for (var j = 0; j < Ny; j++)
        {
            var row = field.Slice(Row(j) - Ghosts, Nx + 2 * Ghosts);
            if (WrapsX)
            {
                row[0] = row[Nx];
                row[1] = row[Nx + 1];
                row[Nx + 2] = row[2];
                row[Nx + 3] = row[3];
            }
            else
            {
                row[0] = row[3];
                row[1] = row[2];
                row[Nx + 2] = row[Nx + 1];
                row[Nx + 3] = row[Nx];
            }
        }

        FillGhostRows(field);
    }

    /// <summary>Fills the ghost rows alone, from rows whose own ghosts have been filled.</summary>
    public void FillGhostRows(Span<double> field)
    {
        for (var g = 1; g <= Ghosts; g++)
        {
            CopyRow(field, WrapsY ? Ny - g : g - 1, -g);
            CopyRow(field, WrapsY ? g - 1 : Ny - g, Ny - 1 + g);
        }
    }

    private void CopyRow(Span<double> field, int from, int to)
        => field.Slice(Row(from) - Ghosts, Nx + 2 * Ghosts).CopyTo(field.Slice(Row(to) - Ghosts, Nx + 2 * Ghosts));
}
