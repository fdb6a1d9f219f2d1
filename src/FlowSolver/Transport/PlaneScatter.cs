using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Carries cell masses along a displacement field: a cell is cut into parts by the local stretch, each part goes to the point that the displacement
/// (linear within the cell) sends it to, and is shared out between the four nearest cell centres. Mass is kept to rounding; walls hold it in.
/// </summary>
/// <remarks>Read as moves from cell centre to cell centre, this is a feasible plan, whose cost and mean moves are given on request.</remarks>
internal sealed class PlaneScatter
{
    // Fixed, so that sums do not depend on the team.
    private const int Stripes = 4;
    private const int MostParts = 8;
    private readonly Grid grid;
    private readonly WorkerTeam team;
    private readonly int nx;
    private readonly int ny;
    private readonly double[][] piles;
    private readonly double[][] movesX = [[], [], [], []];
    private readonly double[][] movesY = [[], [], [], []];
    private readonly double[] costs = new double[8 * Stripes];
    private readonly Action<int> scatterJob;
    private readonly Action<int> gatherJob;
    private double[] mass = [];
    private double[] displacementX = [];
    private double[] displacementY = [];
    private double[] result = [];
    private double[] resultX = [];
    private double[] resultY = [];
    private bool asPlan;
    private double share;

    public PlaneScatter(Grid grid, WorkerTeam team)
    {
        this.grid = grid;
        this.team = team;
        (nx, ny) = (grid.Nx, grid.Ny);
        piles = new double[Stripes][];
        for (var i = 0; i < Stripes; i++)
            piles[i] = new double[grid.CellCount];
        scatterJob = Scatter;
        gatherJob = Gather;
    }

    /// <summary>result ← masses carried along <paramref name="part"/> times the displacement.</summary>
    public void Push(double[] masses, double[] alongX, double[] alongY, double[] target, double part = 1)
    {
        (mass, displacementX, displacementY, result, share, asPlan) = (masses, alongX, alongY, target, part, false);
        team.Run(Stripes, scatterJob);
        team.Run(16, gatherJob);
    }

    /// <summary>The same as a plan between centres: also Σ mass·move at each target cell, and the return value Σ mass·|move|².</summary>
    public double PushPlan(double[] masses, double[] alongX, double[] alongY, double[] target, double[] meanX, double[] meanY)
    {
        for (var i = 0; i < Stripes && movesX[i].Length == 0; i++)
            (movesX[i], movesY[i]) = (new double[grid.CellCount], new double[grid.CellCount]);
        (mass, displacementX, displacementY, result, resultX, resultY, share, asPlan) = (masses, alongX, alongY, target, meanX, meanY, 1, true);
        team.Run(Stripes, scatterJob);
        team.Run(16, gatherJob);
        var cost = 0.0;
        for (var i = 0; i < Stripes; i++)
            cost += costs[8 * i];
        return cost;
    }

    private void Gather(int block)
    {
        var (from, to) = ((int)((long)block * result.Length / 16), (int)((long)(block + 1) * result.Length / 16));
        Sum(piles, result, from, to);
        if (!asPlan)
            return;
        Sum(movesX, resultX, from, to);
        Sum(movesY, resultY, from, to);
    }

    private static void Sum(double[][] parts, double[] target, int from, int to)
    {
        parts[0].AsSpan(from, to - from).CopyTo(target.AsSpan(from));
        for (var k = 1; k < Stripes; k++)
            SpanKernels.AddScaled(target.AsSpan(from, to - from), 1, parts[k].AsSpan(from, to - from));
    }

    private static double Gentler(double a, double b) => Math.Abs(a) < Math.Abs(b) ? a : b;

    private void Scatter(int stripe)
    {
        var pile = piles[stripe];
        Array.Clear(pile);
        var (moveX, moveY) = (movesX[stripe], movesY[stripe]);
        if (asPlan)
        {
            Array.Clear(moveX);
            Array.Clear(moveY);
        }

        var (inverseX, inverseY) = (share / grid.X.Width, share / grid.Y!.Width);
        var (squareX, squareY) = (grid.X.Width * grid.X.Width, grid.Y.Width * grid.Y.Width);
        var (px, py) = (grid.X.IsPeriodic, grid.Y.IsPeriodic);
        var cost = 0.0;
        for (var row = stripe * ny / Stripes; row < (stripe + 1) * ny / Stripes; row++)
        {
            var below = (row > 0 ? row - 1 : py ? ny - 1 : 0) * nx;
            var above = (row < ny - 1 ? row + 1 : py ? 0 : row) * nx;
            for (var column = 0; column < nx; column++)
            {
                var cell = row * nx + column;
                var whole = mass[cell];
                if (whole == 0)
                    continue;
                var left = row * nx + (column > 0 ? column - 1 : px ? nx - 1 : 0);
                var right = row * nx + (column < nx - 1 ? column + 1 : px ? 0 : column);
                var (u, v) = (displacementX[cell] * inverseX, displacementY[cell] * inverseY);
                // Slopes of the displacement, in cells a cell; the gentler side, so that a cell beside a tear goes to one side whole.
                var uu = Gentler(displacementX[right] - displacementX[cell], displacementX[cell] - displacementX[left]) * inverseX;
                var vu = Gentler(displacementY[right] - displacementY[cell], displacementY[cell] - displacementY[left]) * inverseY;
                var uv = Gentler(displacementX[above + column] - displacementX[cell], displacementX[cell] - displacementX[below + column]) * inverseX;
                var vv = Gentler(displacementY[above + column] - displacementY[cell], displacementY[cell] - displacementY[below + column]) * inverseY;
                var partsX = Parts(Math.Abs(1 + uu) + Math.Abs(vu));
                var partsY = Parts(Math.Abs(1 + vv) + Math.Abs(uv));
                var portion = whole / (partsX * partsY);
                for (var q = 0; q < partsY; q++)
                {
                    var t = (q + 0.5) / partsY - 0.5;
                    for (var p = 0; p < partsX; p++)
                    {
                        var s = (p + 0.5) / partsX - 0.5;
                        var (x, y) = (column + u + s * (1 + uu) + t * uv, row + v + t * (1 + vv) + s * vu);
                        if (!px)
                            x = Math.Clamp(x, 0, nx - 1);
                        if (!py)
                            y = Math.Clamp(y, 0, ny - 1);
                        var (i, j) = ((int)Math.Floor(x), (int)Math.Floor(y));
                        var (f, g) = (x - i, y - j);
                        var (i0, i1) = (Place(i, nx, px), Place(i + 1, nx, px));
                        var (j0, j1) = (Place(j, ny, py) * nx, Place(j + 1, ny, py) * nx);
                        var (w00, w10, w01, w11) = (portion * (1 - f) * (1 - g), portion * f * (1 - g), portion * (1 - f) * g, portion * f * g);
                        pile[j0 + i0] += w00;
                        pile[j0 + i1] += w10;
                        pile[j1 + i0] += w01;
                        pile[j1 + i1] += w11;
                        if (!asPlan)
                            continue;
                        var (m0, m1, n0, n1) = ((double)(i - column), (double)(i + 1 - column), (double)(j - row), (double)(j + 1 - row));
                        moveX[j0 + i0] += w00 * m0;
                        moveX[j0 + i1] += w10 * m1;
                        moveX[j1 + i0] += w01 * m0;
                        moveX[j1 + i1] += w11 * m1;
                        moveY[j0 + i0] += w00 * n0;
                        moveY[j0 + i1] += w10 * n0;
                        moveY[j1 + i0] += w01 * n1;
                        moveY[j1 + i1] += w11 * n1;
                        cost += squareX * ((w00 + w01) * m0 * m0 + (w10 + w11) * m1 * m1)
                            + squareY * ((w00 + w10) * n0 * n0 + (w01 + w11) * n1 * n1);
                    }
                }
            }
        }

        costs[8 * stripe] = cost;
    }

    private static int Parts(double stretch) => stretch < 1.2 ? 1 : Math.Min(MostParts, (int)Math.Ceiling(stretch));

    private static int Place(int index, int count, bool periodic)
    {
        if ((uint)index < (uint)count)
            return index;
        if (!periodic)
            return index < 0 ? 0 : count - 1;
        var wrapped = index % count;
        return wrapped < 0 ? wrapped + count : wrapped;
    }
}
