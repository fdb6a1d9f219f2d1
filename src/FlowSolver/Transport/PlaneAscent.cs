using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>
/// Dual ascent for transport between any two densities, also far ones and ones with holes: the back-and-forth method.
/// </summary>
/// <remarks>
/// M. Jacobs, F. Léger, <i>A fast approach to optimal transport: the back-and-forth method</i>, Numer. Math. 146 (2020) 513-544: gradient ascent
/// in a Sobolev norm, in turn on the potential of either side, each followed by a c-transform; the step length by their Armijo-Goldstein rule.
/// With φ on b's side and f on a's, f(x) = min over y of ½|x − y|² + φ(y), the dual value is D = Σ a f − Σ b φ ≤ W2²/2 for masses at the cell
/// centres. Departures: the norm is weighted, ∫(ρ + floor)|∇·|² with ρ the mean of the mass there and the mass carried there (the curvature of D
/// where the map is near the identity), solved roughly by multigrid: this took a fifth of the iterations of the plain norm; the best potential is kept.
/// </remarks>
internal sealed class PlaneAscent
{
    // Of the largest density. Lower is faster where supports overlap and less steady where they do not.
    private const double Floor = 0.02;
    private readonly Grid grid;
    private readonly WorkerTeam team;
    private readonly CTransform transform;
    private readonly PlaneElliptic elliptic;
    private readonly PlaneScatter scatter;
    private readonly double[] massA;
    private readonly double[] massB;
    private readonly double[] pushed;
    private readonly double[] weight;
    private readonly double[] right;
    private readonly double[] rise;
    private readonly double[] negative;
    private readonly double[] backX;
    private readonly double[] backY;
    private readonly double[] best;
    private readonly int[] minimisers;
    private readonly Action<int> slopeJob;
    private double[] slopesOf = [];
    private double[] alongX = [];
    private double[] alongY = [];

    public PlaneAscent(Grid grid, WorkerTeam team)
    {
        this.grid = grid;
        this.team = team;
        transform = new CTransform(grid, 1, team);
        elliptic = new PlaneElliptic(grid.Nx, grid.Ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic, grid.X.Width, grid.Y.Width, team);
        scatter = new PlaneScatter(grid, team);
        var cells = grid.CellCount;
        Potential = new double[cells];
        Conjugate = new double[cells];
        DisplacementX = new double[cells];
        DisplacementY = new double[cells];
        massA = new double[cells];
        massB = new double[cells];
        pushed = new double[cells];
        weight = new double[cells];
        right = new double[cells];
        rise = new double[cells];
        negative = new double[cells];
        backX = new double[cells];
        backY = new double[cells];
        best = new double[cells];
        minimisers = new int[cells];
        slopeJob = Slopes;
    }

    /// <summary>φ on b's side.</summary>
    public double[] Potential { get; }

    /// <summary>f on a's side.</summary>
    public double[] Conjugate { get; }

    /// <summary>x part of the displacement from a to b at the last transform of φ.</summary>
    public double[] DisplacementX { get; }

    /// <summary>y part of the displacement.</summary>
    public double[] DisplacementY { get; }

    /// <summary>D at the last evaluation.</summary>
    public double Value { get; private set; }

    /// <summary>Share of the mass that the map leaves in the wrong cell.</summary>
    public double Misplaced { get; private set; }

    public void SetDensities(double[] a, double[] b)
    {
        for (var i = 0; i < a.Length; i++)
            (massA[i], massB[i]) = (a[i] * grid.CellVolume, b[i] * grid.CellVolume);
    }

    /// <summary>
    /// Ascends from the present potential and leaves the best pair found; returns the iterations. Stops when little mass is misplaced, when the
    /// value no longer rises by <paramref name="rate"/> of itself, or at the limit.
    /// </summary>
    /// <param name="limit">Most iterations, each on both sides.</param>
    /// <param name="misplaced">Share of misplaced mass that is good enough.</param>
    /// <param name="rate">Least relative rise of the value over three iterations.</param>
    /// <param name="cancellation">Looked at before every iteration.</param>
    public int Run(int limit, double misplaced, double rate, CancellationToken cancellation = default)
    {
        var sigma = 1.0;
        TransformPotential();
        var top = Value;
        var mark = Value;
        Potential.CopyTo(best, 0);
        var done = 0;
        for (; done < limit; done++)
        {
            cancellation.ThrowIfCancellationRequested();
            var start = Value;
            var norm = Climb(massA, DisplacementX, DisplacementY, massB, Potential, sigma, measure: true);
            if (Misplaced <= misplaced || !(norm > 0))
                break;
            TransformPotential();
            sigma = NextStep(sigma, Value - start, norm);

            // The other side, from the potentials made conjugate to each other.
            var middle = TransformConjugate();
            norm = Climb(massB, backX, backY, massA, Conjugate, -sigma, measure: false);
            var after = TransformConjugate();
            sigma = NextStep(sigma, after - middle, norm);
            TransformPotential();
            if (Value > top)
            {
                top = Value;
                Potential.CopyTo(best, 0);
            }
            else if (top - Value > 0.01 * Math.Abs(top))
            {
                // A step that overshot: back to the best, more carefully.
                best.CopyTo(Potential, 0);
                TransformPotential();
                sigma *= 0.25;
            }

            if (done % 3 == 2)
            {
                if (top - mark < rate * Math.Abs(top))
                {
                    done++;
                    break;
                }

                mark = top;
            }
        }

        best.CopyTo(Potential, 0);
        TransformPotential();
        TransformConjugate();
        TransformPotential();
        return done;
    }

    /// <summary>f and displacement from φ, and the dual value, with both points at cell centres.</summary>
    public void TransformPotential()
    {
        transform.Apply(Potential, Conjugate, minimisers);
        (slopesOf, alongX, alongY) = (Conjugate, DisplacementX, DisplacementY);
        team.Run(16, slopeJob);
        Value = DualValue();
    }

    /// <summary>The plan that a displacement gives, with masses rounded off to b: its cost, an upper bound of W2² for masses at the centres.</summary>
    public double RoundedPlanCost(double[] displacementX, double[] displacementY, PlaneRounding rounding)
    {
        var cost = scatter.PushPlan(massA, displacementX, displacementY, pushed, backX, backY);
        return Math.Max(0, cost + rounding.Settle(pushed, backX, backY, massB));
    }

    private static double NextStep(double sigma, double gain, double norm)
        => gain > 0.75 * sigma * norm ? Math.Min(sigma / 0.8, 4) : gain < 0.25 * sigma * norm ? sigma * 0.8 : sigma;

    // Σ (a − b) φ + Σ a (f − φ): the differences first, so that near densities keep their digits.
    private double DualValue()
    {
        var (sum, rest) = (0.0, 0.0);
        for (var i = 0; i < massA.Length; i++)
        {
            sum += (massA[i] - massB[i]) * Potential[i];
            rest += massA[i] * (Conjugate[i] - Potential[i]);
        }

        return sum + rest;
    }

    // φ(y) = max over x of f(x) − ½|x − y|², with the displacement from b to a.
    private double TransformConjugate()
    {
        for (var i = 0; i < negative.Length; i++)
            negative[i] = -Conjugate[i];
        transform.Apply(negative, Potential, minimisers);
        (slopesOf, alongX, alongY) = (Potential, backX, backY);
        team.Run(16, slopeJob);
        for (var i = 0; i < negative.Length; i++)
            Potential[i] = -Potential[i];
        return DualValue();
    }

    // The displacement is minus the slope of the transform; where that is far from the minimiser (a tear of the map between two neighbours) the latter.
    private void Slopes(int block)
    {
        var (nx, ny) = (grid.Nx, grid.Ny);
        var (scaleX, scaleY) = (-0.5 / grid.X.Width, -0.5 / grid.Y!.Width);
        for (var row = (int)((long)block * ny / 16); row < (int)((long)(block + 1) * ny / 16); row++)
        {
            var below = (row > 0 ? row - 1 : grid.Y.IsPeriodic ? ny - 1 : 0) * nx;
            var above = (row < ny - 1 ? row + 1 : grid.Y.IsPeriodic ? 0 : row) * nx;
            for (var i = 0; i < nx; i++)
            {
                var cell = row * nx + i;
                var left = row * nx + (i > 0 ? i - 1 : grid.X.IsPeriodic ? nx - 1 : 0);
                var right = row * nx + (i < nx - 1 ? i + 1 : grid.X.IsPeriodic ? 0 : i);
                var (x, y) = (scaleX * (slopesOf[right] - slopesOf[left]), scaleY * (slopesOf[above + i] - slopesOf[below + i]));
                var (toRow, toColumn) = Math.DivRem(minimisers[cell], nx);
                var stepX = grid.X.Width * PlaneRounding.Shorter(toColumn - i, nx, grid.X.IsPeriodic);
                var stepY = grid.Y.Width * PlaneRounding.Shorter(toRow - row, ny, grid.Y.IsPeriodic);
                var torn = Math.Abs(x - stepX) > 1.5 * grid.X.Width || Math.Abs(y - stepY) > 1.5 * grid.Y.Width;
                (alongX[cell], alongY[cell]) = torn ? (stepX, stepY) : (x, y);
            }
        }
    }

    // potential += sigma (−∇·(weight ∇))⁻¹ (carried − there); returns the squared norm of the gradient.
    private double Climb(double[] from, double[] displacementX, double[] displacementY, double[] there, double[] potential, double sigma, bool measure)
    {
        scatter.Push(from, displacementX, displacementY, pushed);
        var floor = Floor * SpanKernels.MaxAbs(there);
        var off = 0.0;
        for (var i = 0; i < pushed.Length; i++)
        {
            weight[i] = 0.5 * (Math.Min(pushed[i], 4 * (there[i] + floor)) + there[i]) + floor;
            right[i] = pushed[i] - there[i];
            off += Math.Abs(right[i]);
        }

        if (measure)
            Misplaced = 0.5 * off;
        var (nx, ny) = (grid.Nx, grid.Ny);
        var (scaleX, scaleY) = (0.5 / (grid.X.Width * grid.X.Width), 0.5 / (grid.Y!.Width * grid.Y.Width));
        for (var row = 0; row < ny; row++)
        {
            var here = weight.AsSpan(row * nx, nx);
            var up = weight.AsSpan((row + 1) % ny * nx, nx);
            var faceX = elliptic.RowX(row);
            var faceY = elliptic.RowY(row);
            for (var i = 0; i < here.Length; i++)
            {
                faceX[i] = scaleX * (here[i] + here[i + 1 < nx ? i + 1 : 0]);
                faceY[i] = scaleY * (here[i] + up[i]);
            }
        }

        elliptic.Prepare();
        elliptic.Solve(right, rise, 0.03, 5);
        var norm = SpanKernels.Dot(right, rise);
        SpanKernels.AddScaled(potential, sigma, rise);
        return norm;
    }
}

/// <summary>
/// Rounds a plan off to its target: surplus mass in some cells goes on to cells that lack mass, nearest blocks first (pairs within blocks of 2 × 2
/// cells, then 4 × 4, and so on), and the cost of the whole plan is corrected. Serves one thread.
/// </summary>
internal sealed class PlaneRounding
{
    private readonly Grid grid;
    private readonly int[] next;
    private readonly int[] head;
    private readonly int[] tail;
    private readonly double[] amount;

    public PlaneRounding(Grid grid)
    {
        this.grid = grid;
        next = new int[grid.CellCount];
        head = new int[grid.CellCount];
        tail = new int[grid.CellCount];
        amount = new double[grid.CellCount];
    }

    /// <summary>
    /// The change of Σ mass·|move|² when the plan, which brings <paramref name="arrived"/> with mean move (momentum) to each cell, is made to bring
    /// <paramref name="wanted"/>. The mass sent on is an even share of what arrived.
    /// </summary>
    /// <param name="arrived">Mass that arrives in each cell.</param>
    /// <param name="momentX">Mass times move in x, in cells; with <paramref name="momentY"/>. Pass null for mass that has not moved.</param>
    /// <param name="momentY">Mass times move in y, in cells.</param>
    /// <param name="wanted">Mass wanted in each cell; the same in all.</param>
    public double Settle(double[] arrived, double[]? momentX, double[]? momentY, double[] wanted)
    {
        var (nx, ny) = (grid.Nx, grid.Ny);
        for (var i = 0; i < amount.Length; i++)
        {
            amount[i] = arrived[i] - wanted[i];
            next[i] = -1;
            (head[i], tail[i]) = amount[i] == 0 ? (-1, -1) : (i, i);
        }

        var cost = 0.0;
        var (blocksX, blocksY) = (nx, ny);
        while (blocksX > 1 || blocksY > 1)
        {
            var (coarseX, coarseY) = ((blocksX + 1) / 2, (blocksY + 1) / 2);
            for (var row = 0; row < coarseY; row++)
            {
                for (var column = 0; column < coarseX; column++)
                    cost += Merge(column, row, blocksX, blocksY, coarseX, arrived, momentX, momentY);
            }

            (blocksX, blocksY) = (coarseX, coarseY);
        }

        return cost;
    }

    private double Merge(int column, int row, int blocksX, int blocksY, int coarseX, double[] arrived, double[]? momentX, double[]? momentY)
    {
        int surplusHead = -1, surplusTail = -1, lackHead = -1, lackTail = -1;
        for (var r = 2 * row; r < Math.Min(blocksY, 2 * row + 2); r++)
        {
            for (var c = 2 * column; c < Math.Min(blocksX, 2 * column + 2); c++)
            {
                var block = r * blocksX + c;
                if (head[block] < 0)
                    continue;
                if (amount[head[block]] > 0)
                    Append(ref surplusHead, ref surplusTail, head[block], tail[block]);
                else
                    Append(ref lackHead, ref lackTail, head[block], tail[block]);
            }
        }

        var cost = 0.0;
        while (surplusHead >= 0 && lackHead >= 0)
        {
            var (from, to) = (surplusHead, lackHead);
            var moved = Math.Min(amount[from], -amount[to]);
            cost += moved * Extra(from, to, arrived, momentX, momentY);
            amount[from] -= moved;
            amount[to] += moved;
            if (amount[from] <= 0)
                surplusHead = next[from];
            if (amount[to] >= 0)
                lackHead = next[to];
        }

        // Coarse blocks are written behind those still to be read: row·coarseX + column never passes 2·row·blocksX + 2·column.
        var target = row * coarseX + column;
        (head[target], tail[target]) = surplusHead >= 0 ? (surplusHead, surplusTail) : lackHead >= 0 ? (lackHead, lackTail) : (-1, -1);
        return cost;
    }

    private void Append(ref int head, ref int tail, int first, int last)
    {
        if (head < 0)
            head = first;
        else
            next[tail] = first;
        tail = last;
        next[last] = -1;
    }

    private double Extra(int from, int to, double[] arrived, double[]? momentX, double[]? momentY)
    {
        var stepX = Shorter(to % grid.Nx - from % grid.Nx, grid.Nx, grid.X.IsPeriodic);
        var stepY = Shorter(to / grid.Nx - from / grid.Nx, grid.Ny, grid.Y!.IsPeriodic);
        var (meanX, meanY) = momentX is null || arrived[from] <= 0 ? (0.0, 0.0) : (momentX[from] / arrived[from], momentY![from] / arrived[from]);
        return grid.X.Width * grid.X.Width * stepX * (stepX + 2 * meanX) + grid.Y.Width * grid.Y.Width * stepY * (stepY + 2 * meanY);
    }

    /// <summary>A step in cells, the shorter way round on a circle.</summary>
    public static int Shorter(int step, int count, bool periodic)
        => !periodic ? step : 2 * step > count ? step - count : 2 * step < -count ? step + count : step;
}
