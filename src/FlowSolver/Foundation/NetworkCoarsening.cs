namespace FlowSolver.Foundation;

/// <summary>
/// A network and one with every other cell along each axis (or along the narrower one only), joined by interpolation that follows the conductances.
/// </summary>
/// <remarks>
/// A cell between two kept ones takes the value that lets the current through, links across being folded in; a cell between four takes that of its own
/// equation. The coarse network is the one whose energy is that of interpolated fields, link by link:
/// R. Alcouffe, A. Brandt, J. Dendy, J. Painter, SIAM J. Sci. Stat. Comput. 2 (1981) 430-454; J. Dendy, J. Comput. Phys. 48 (1982) 366-386 (both from memory).
/// Weights that fall by many orders of magnitude over a few cells do no harm: shares below one in fifty are dropped, or the light cells of a tail, each with a
/// tiny share in heavy ones, would be driven to huge values to serve those.
/// </remarks>
internal sealed class NetworkCoarsening
{
    private const double LeastShare = 0.02;
    private readonly GridNetwork fine;
    private readonly bool halvesX;
    private readonly bool halvesY;
    private readonly int coarseNx;
    private readonly int coarseNy;
    private readonly bool wrapsX;
    private readonly bool wrapsY;
    // Shares of the four kept cells around each cell: at and right of it, in its row and the row above. Unused ones are 0.
    private readonly double[][] shares;

    public NetworkCoarsening(GridNetwork fine)
    {
        this.fine = fine;
        halvesX = fine.Nx > 3 && (fine.Ratio > 1 / 1.5 || fine.Ny <= 3);
        halvesY = fine.Ny > 3 && (fine.Ratio < 1.5 || fine.Nx <= 3);
        coarseNx = halvesX ? (fine.Nx + 1) / 2 : fine.Nx;
        coarseNy = halvesY ? (fine.Ny + 1) / 2 : fine.Ny;
        wrapsX = fine.LinksAcrossX();
        wrapsY = fine.LinksAcrossY();
        shares = [new double[fine.Count], new double[fine.Count], new double[fine.Count], new double[fine.Count]];
        SetShares();
        Coarse = CoarseNetwork();
    }

    public GridNetwork Coarse { get; }

    private bool KeptX(int i) => !halvesX || (i & 1) == 0;

    private bool KeptY(int j) => !halvesY || (j & 1) == 0;

    private int CoarseX(int i) => halvesX ? i / 2 : i;

    private int CoarseY(int j) => halvesY ? j / 2 : j;

    private int Cell(int i, int j) => Wrapped(j, fine.Ny) * fine.Nx + Wrapped(i, fine.Nx);

    // Conductance between a cell and the neighbour (di, dj) from it, 0 where there is none.
    private double Link(int i, int j, int di, int dj)
    {
        if (dj < 0 || (dj == 0 && di < 0))
        {
            (i, j, di, dj) = (i + di, j + dj, -di, -dj);
            if ((i < 0 && !wrapsX) || (i >= fine.Nx && !wrapsX) || (j < 0 && !wrapsY))
                return 0;
        }

        var cell = Cell(i, j);
        return (di, dj) switch
        {
            (1, 0) => fine.LinkX[cell],
            (0, 1) => fine.LinkY[cell],
            (1, 1) => fine.LinkUpRight.Length > 0 ? fine.LinkUpRight[cell] : 0,
            _ => fine.LinkUpLeft.Length > 0 ? fine.LinkUpLeft[cell] : 0,
        };
    }

    private void SetShares()
    {
        for (var j = 0; j < fine.Ny; j++)
        {
            for (var i = 0; i < fine.Nx; i++)
            {
                var cell = j * fine.Nx + i;
                if (KeptX(i) && KeptY(j))
                    shares[0][cell] = 1;
                else if (KeptY(j))
                    (shares[0][cell], shares[1][cell]) = Split(
                        Link(i, j, -1, 0) + Link(i, j, -1, -1) + Link(i, j, -1, 1), Link(i, j, 1, 0) + Link(i, j, 1, -1) + Link(i, j, 1, 1));
                else if (KeptX(i))
                    (shares[0][cell], shares[2][cell]) = Split(
                        Link(i, j, 0, -1) + Link(i, j, -1, -1) + Link(i, j, 1, -1), Link(i, j, 0, 1) + Link(i, j, -1, 1) + Link(i, j, 1, 1));
            }
        }

        for (var j = 0; j < fine.Ny; j++)
        {
            for (var i = 0; i < fine.Nx; i++)
            {
                if (!KeptX(i) && !KeptY(j))
                    SetMiddle(i, j);
            }
        }
    }

    private static (double, double) Split(double low, double high)
    {
        (low, high) = (Math.Max(low, 0), Math.Max(high, 0));
        if (low < LeastShare * high)
            low = 0;
        if (high < LeastShare * low)
            high = 0;
        return low + high > 0 ? (low / (low + high), high / (low + high)) : (1, 0);
    }

    private void SetMiddle(int i, int j)
    {
        Span<double> sums = stackalloc double[4];
        sums.Clear();
        Add(Link(i, j, -1, 0), Cell(i - 1, j), 0, 2, sums);
        // The cell to the right stands on the kept column to the right: its shares of that column count as those of corners 1 and 3.
        AddShifted(Link(i, j, 1, 0), Cell(i + 1, j), 0, 1, 2, 3, sums);
        Add(Link(i, j, 0, -1), Cell(i, j - 1), 0, 1, sums);
        AddShifted(Link(i, j, 0, 1), Cell(i, j + 1), 0, 2, 1, 3, sums);
        sums[0] += Link(i, j, -1, -1);
        sums[1] += Link(i, j, 1, -1);
        sums[2] += Link(i, j, -1, 1);
        sums[3] += Link(i, j, 1, 1);
        var largest = Math.Max(Math.Max(sums[0], sums[1]), Math.Max(sums[2], sums[3]));
        for (var corner = 0; corner < 4; corner++)
        {
            if (sums[corner] < LeastShare * largest)
                sums[corner] = 0;
        }

        var total = sums[0] + sums[1] + sums[2] + sums[3];
        var cell = j * fine.Nx + i;
        for (var corner = 0; corner < 4; corner++)
            shares[corner][cell] = total > 0 ? sums[corner] / total : corner == 0 ? 1 : 0;
    }

    private void Add(double link, int neighbour, int first, int second, Span<double> sums)
    {
        if (link == 0)
            return;
        sums[first] += link * shares[first][neighbour];
        sums[second] += link * shares[second][neighbour];
    }

    private void AddShifted(double link, int neighbour, int first, int firstTo, int second, int secondTo, Span<double> sums)
    {
        if (link == 0)
            return;
        sums[firstTo] += link * shares[first][neighbour];
        sums[secondTo] += link * shares[second][neighbour];
    }

    // The energy of a link between interpolated values is that of links between the four corners of the coarse square that holds it.
    private GridNetwork CoarseNetwork()
    {
        var count = coarseNx * coarseNy;
        var plane = coarseNy > 1;
        var linkX = new double[count];
        var linkY = new double[count];
        var upRight = new double[plane ? count : 0];
        var upLeft = new double[plane ? count : 0];
        var earth = new double[count];
        var mass = new double[count];
        for (var j = 0; j < fine.Ny; j++)
        {
            for (var i = 0; i < fine.Nx; i++)
            {
                var cell = j * fine.Nx + i;
                for (var k = 0; k < 4; k++)
                {
                    var share = shares[k][cell];
                    if (share == 0)
                        continue;
                    var node = Node(CoarseX(i) + (k & 1), CoarseY(j) + (k >> 1));
                    earth[node] += share * fine.Earth[cell];
                    mass[node] += share * fine.Mass[cell];
                }

                AddLink(i, j, 1, 0, fine.LinkX[cell]);
                AddLink(i, j, 0, 1, fine.LinkY[cell]);
                if (fine.LinkUpRight.Length == 0)
                    continue;
                AddLink(i, j, 1, 1, fine.LinkUpRight[cell]);
                AddLink(i, j, -1, 1, fine.LinkUpLeft[cell]);
            }
        }

        void AddLink(int i, int j, int di, int dj, double conductance)
        {
            if (conductance == 0 || (di != 0 && fine.Nx == 1) || (dj != 0 && fine.Ny == 1))
                return;
            var low = Wrapped(i + Math.Min(di, 0), fine.Nx);
            Span<double> difference = stackalloc double[4];
            difference.Clear();
            Spread(i, j, di < 0, false, 1, difference);
            Spread(Wrapped(i + di, fine.Nx), Wrapped(j + dj, fine.Ny), di > 0, dj > 0, -1, difference);
            AddLinks(difference, conductance, CoarseX(low), CoarseY(j), linkX, linkY, upRight, upLeft);
        }

        var ratio = fine.Ratio * (halvesY ? 2 : 1) / (halvesX ? 2 : 1);
        return new GridNetwork(coarseNx, coarseNy, linkX, linkY, upRight, upLeft, earth, mass, ratio);
    }

    // What a cell takes from the corners of a square that it lies in. As the right or upper end of a link it may stand on the far edge.
    private void Spread(int i, int j, bool rightEnd, bool upperEnd, double sign, Span<double> corners)
    {
        var shift = (rightEnd && KeptX(i) ? 1 : 0) + (upperEnd && KeptY(j) ? 2 : 0);
        for (var k = 0; k < 4; k++)
        {
            var share = shares[k][j * fine.Nx + i];
            if (share != 0)
                corners[k + shift] += sign * share;
        }
    }

    private static int Wrapped(int index, int count) => index < 0 ? index + count : index >= count ? index - count : index;

    private int Node(int x, int y) => (y >= coarseNy ? y - coarseNy : y) * coarseNx + (x >= coarseNx ? x - coarseNx : x);

    private void AddLinks(
        Span<double> d, double conductance, int x, int y, double[] linkX, double[] linkY, double[] upRight, double[] upLeft)
    {
        linkX[Node(x, y)] -= conductance * d[0] * d[1];
        linkY[Node(x, y)] -= conductance * d[0] * d[2];
        if (d[1] != 0)
            linkY[Node(x + 1, y)] -= conductance * d[1] * d[3];
        if (d[2] != 0)
            linkX[Node(x, y + 1)] -= conductance * d[2] * d[3];
        if (upRight.Length == 0)
            return;
        upRight[Node(x, y)] -= conductance * d[0] * d[3];
        if (d[1] != 0)
            upLeft[Node(x + 1, y)] -= conductance * d[1] * d[2];
    }

    /// <summary>fine ← interpolated coarse, or added to it.</summary>
    public void Interpolate(double[] coarse, double[] target, bool add)
    {
        var keep = add ? 1.0 : 0.0;
        for (var j = 0; j < fine.Ny; j++)
        {
            var at = j * fine.Nx;
            var low = coarse.AsSpan(CoarseY(j) * coarseNx, coarseNx);
            var high = coarse.AsSpan(Wrapped(CoarseY(j) + 1, coarseNy) * coarseNx, coarseNx);
            var row = target.AsSpan(at, fine.Nx);
            var s0 = shares[0].AsSpan(at, fine.Nx);
            var s1 = shares[1].AsSpan(at, fine.Nx);
            var s2 = shares[2].AsSpan(at, fine.Nx);
            var s3 = shares[3].AsSpan(at, fine.Nx);
            var between = !KeptY(j);
            if (!halvesX)
            {
                for (var i = 0; i < row.Length; i++)
                    row[i] = keep * row[i] + (between ? s0[i] * low[i] + s2[i] * high[i] : low[i]);
                continue;
            }

            for (var left = 0; left < coarseNx; left++)
            {
                var i = 2 * left;
                var (here, above) = (low[left], high[left]);
                row[i] = keep * row[i] + (between ? s0[i] * here + s2[i] * above : here);
                if (++i >= row.Length)
                    break;
                var right = left == coarseNx - 1 ? 0 : left + 1;
                var value = s0[i] * here + s1[i] * low[right];
                if (between)
                    value += s2[i] * above + s3[i] * high[right];
                row[i] = keep * row[i] + value;
            }
        }
    }

    /// <summary>coarse ← the transpose of interpolation, of a fine field.</summary>
    public void Restrict(double[] source, double[] coarse)
    {
        Array.Clear(coarse);
        for (var j = 0; j < fine.Ny; j++)
        {
            var at = j * fine.Nx;
            var low = coarse.AsSpan(CoarseY(j) * coarseNx, coarseNx);
            var high = coarse.AsSpan(Wrapped(CoarseY(j) + 1, coarseNy) * coarseNx, coarseNx);
            var row = source.AsSpan(at, fine.Nx);
            var s0 = shares[0].AsSpan(at, fine.Nx);
            var s1 = shares[1].AsSpan(at, fine.Nx);
            var s2 = shares[2].AsSpan(at, fine.Nx);
            var s3 = shares[3].AsSpan(at, fine.Nx);
            var between = !KeptY(j);
            if (!halvesX)
            {
                for (var i = 0; i < row.Length; i++)
                {
                    low[i] += between ? s0[i] * row[i] : row[i];
                    if (between)
                        high[i] += s2[i] * row[i];
                }

                continue;
            }

            for (var left = 0; left < coarseNx; left++)
            {
                var i = 2 * left;
                low[left] += between ? s0[i] * row[i] : row[i];
                if (between)
                    high[left] += s2[i] * row[i];
                if (++i >= row.Length)
                    break;
                var right = left == coarseNx - 1 ? 0 : left + 1;
                low[left] += s0[i] * row[i];
                low[right] += s1[i] * row[i];
                if (!between)
                    continue;
                high[left] += s2[i] * row[i];
                high[right] += s3[i] * row[i];
            }
        }
    }
}
