using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Transport;

/// <summary>How a transport problem in the plane was solved.</summary>
public enum PlaneMethod
{
    /// <summary>The densities were the same: nothing moves.</summary>
    Identical,

    /// <summary>Newton's method on the Monge-Ampère equation: smooth densities.</summary>
    Newton,

    /// <summary>Dual ascent with a rounded plan: densities with edges or holes.</summary>
    Ascent,
}

/// <summary>What to aim at in <see cref="PlaneTransport.Solve"/>.</summary>
public sealed record PlaneTransportOptions
{
    /// <summary>
    /// Relative width (High − Low)/High of the bracket that Newton's method must reach; above it dual ascent is tried as well and the narrower
    /// bracket kept. Default 0.002. A promise about the bracket, not about the distance, which is usually far better.
    /// </summary>
    public double Tolerance { get; init; } = 2e-3;

    /// <summary>Most iterations of Newton's method on each grid. Default 12.</summary>
    public int NewtonSteps { get; init; } = 12;

    /// <summary>Most iterations of dual ascent on each grid, each on both sides. Default 60 on coarse grids; the finest gets a quarter.</summary>
    public int AscentSteps { get; init; } = 60;
}

/// <summary>Optimal transport between two densities on one grid.</summary>
public sealed record PlaneTransportResult
{
    /// <summary>W2 with its bounds, in units of length.</summary>
    public required TransportBracket Bracket { get; init; }

    /// <summary>The density that is moved, of mass 1.</summary>
    public required Density From { get; init; }

    /// <summary>The density that it is moved to, of mass 1.</summary>
    public required Density To { get; init; }

    /// <summary>x part of the map: mass at centre x goes to x + displacement. At the cell centres, x fastest; on a circle the shorter way round.</summary>
    public required double[] DisplacementX { get; init; }

    /// <summary>y part of the map.</summary>
    public required double[] DisplacementY { get; init; }

    /// <summary>φ on the side of <see cref="To"/>, in units of length²: W2²/2 ≥ ∫ From·φᶜ − ∫ To·φ, φᶜ(x) = min over y of ½|x − y|² + φ(y).</summary>
    public required double[] Potential { get; init; }

    /// <summary>φᶜ on the side of <see cref="From"/>.</summary>
    public required double[] Conjugate { get; init; }

    /// <summary>Iterations, over all grids.</summary>
    public required int Iterations { get; init; }

    /// <summary>The method whose bracket is given.</summary>
    public required PlaneMethod Method { get; init; }

    /// <summary>Why the iteration ended, as a sentence.</summary>
    public required string StopReason { get; init; }

    /// <summary>Share of the mass that the map alone would leave in the wrong place; its cost is part of <see cref="TransportBracket.High"/>.</summary>
    public required double MisplacedMass { get; init; }

    /// <summary>
    /// √((hx² + hy²)/3): between densities constant in cells W2 differs by at most this from that between masses at the cell centres (each density
    /// moves by √((hx² + hy²)/12) at most).
    /// </summary>
    public required double GridBound { get; init; }
}

/// <summary>
/// Wasserstein-2 distance in the plane with lower and upper bound and the map itself, between any two densities on one grid; axes with walls, periodic
/// ones, and one of each.
/// </summary>
/// <remarks>
/// <b>What the numbers mean.</b> Integrals are sums over cell centres. Low is a dual value: any potential φ gives ∫a φᶜ − ∫b φ ≤ W2²/2, with a
/// c-transform that is really taken, between the centres (never above the one over the centres: Low holds for masses at the centres to rounding).
/// <para>Smooth densities (<see cref="PlaneMethod.Newton"/>): densities are read as samples of smooth functions. High is the cost of the map
/// y ↦ y + ∇φ, which carries the pulled density b′ exactly to a, plus a bound for moving b′ to b: the flux bound W2² ≤ ∫|m|²/Λ with ∇·m = b′ − b and Λ the logarithmic mean of the two
/// (the straight path of densities: J.-D. Benamou, Y. Brenier, Numer. Math. 84 (2000) 375-393), and what that cannot reach by a plan. Both bounds carry quadrature errors of fourth order in the
/// cell width; where these exceed the gap, Low and High are exchanged.</para>
/// <para>Others (<see cref="PlaneMethod.Ascent"/>): High is the cost of a feasible plan between cells, so it bounds W2 for masses at the centres, and also for densities constant in cells
/// (let each pair of cells move by a translation). The best value is put a fifth of the way up from Low. Low is proved for masses at the centres; for densities constant in cells widen it by <see cref="PlaneTransportResult.GridBound"/>.</para>
/// Coarse to fine where the densities are not near each other. The result does not depend on the team's size.
/// </remarks>
public static partial class PlaneTransport
{
    private const int CoarsestCells = 96;
    private const double Contact = 0.02;

    // Where dual ascent gives the best value between the bounds: dual values came out several times nearer than plans on all pairs with a known distance.
    private const double Nearer = 0.2;

    /// <summary>W2 with bounds between two densities on a plane grid, in units of length.</summary>
    /// <remarks>
    /// Where one grid has a power of two times the cells of the other on both axes, the finer density is first read at the coarser centres, by cubic
    /// interpolation (values below 0 count as 0): right for smooth densities, of which both are samples.
    /// </remarks>
    /// <exception cref="ArgumentException">A grid is not plane, the grids do not match, or a density is not a number or without mass.</exception>
    public static TransportBracket Between(Density first, Density second, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(first);
        ArgumentNullException.ThrowIfNull(second);
        while (first.Grid.Nx > second.Grid.Nx && first.Grid.Dimension == 2 && first.Grid.Halved() is { } half)
            first = ReadAt(first, half);
        while (second.Grid.Nx > first.Grid.Nx && second.Grid.Dimension == 2 && second.Grid.Halved() is { } half)
            second = ReadAt(second, half);
        return Solve(first, second, new PlaneTransportOptions(), team).Bracket;
    }

    /// <summary>Solves the transport problem; densities are scaled to mass 1 first.</summary>
    /// <param name="from">The density that is moved.</param>
    /// <param name="to">The density that it is moved to.</param>
    /// <param name="options">What to aim at.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <param name="cancellation">Looked at between iterations.</param>
    /// <exception cref="ArgumentException">A grid is not plane, the grids differ, or a density is not a number or without mass.</exception>
    public static PlaneTransportResult Solve(
        Density from, Density to, PlaneTransportOptions options, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(from);
        ArgumentNullException.ThrowIfNull(to);
        ArgumentNullException.ThrowIfNull(options);
        ArgumentNullException.ThrowIfNull(team);
        Require.That(from.Grid.Dimension == 2, "The densities were on a line; they must be on a plane grid.");
        Require.That(from.Grid == to.Grid, "The two densities were on different grids; they must be on one.");
        var (a, b) = (Checked(from), Checked(to));
        var distance = 0.0;
        for (var i = 0; i < a.Values.Length; i++)
            distance += Math.Abs(a.Values[i] - b.Values[i]);
        distance *= 0.5 * a.Grid.CellVolume;
        if (distance == 0)
            return Nothing(a, b);
        return new Solver(a, b, distance, options, team, cancellation).Run();
    }

    /// <summary>√((hx² + hy²)/3) for a plane grid; see <see cref="PlaneTransportResult.GridBound"/>.</summary>
    public static double GridBound(Grid grid)
    {
        ArgumentNullException.ThrowIfNull(grid);
        Require.That(grid.Y is not null, "The grid was a line; it must be plane.");
        return Math.Sqrt((grid.X.Width * grid.X.Width + grid.Y.Width * grid.Y.Width) / 3);
    }

    // Point values at the centres of pairs, (−1, 9, 9, −1)/16 along each axis.
    private static Density ReadAt(Density fine, Grid coarse)
    {
        var (nx, ny) = (fine.Grid.Nx, fine.Grid.Ny);
        var rows = new double[coarse.Nx * ny];
        for (var row = 0; row < ny; row++)
        {
            for (var i = 0; i < coarse.Nx; i++)
            {
                rows[row * coarse.Nx + i] = (9 * (fine.Values[row * nx + 2 * i] + fine.Values[row * nx + 2 * i + 1])
                    - fine.Values[row * nx + Beside(2 * i - 1, nx, coarse.X.IsPeriodic)] - fine.Values[row * nx + Beside(2 * i + 2, nx, coarse.X.IsPeriodic)]) / 16;
            }
        }

        var values = new double[coarse.CellCount];
        for (var row = 0; row < coarse.Ny; row++)
        {
            var (r0, r3) = (Beside(2 * row - 1, ny, coarse.Y!.IsPeriodic) * coarse.Nx, Beside(2 * row + 2, ny, coarse.Y.IsPeriodic) * coarse.Nx);
            var (r1, r2) = (2 * row * coarse.Nx, (2 * row + 1) * coarse.Nx);
            for (var i = 0; i < coarse.Nx; i++)
                values[row * coarse.Nx + i] = Math.Max(0, (9 * (rows[r1 + i] + rows[r2 + i]) - rows[r0 + i] - rows[r3 + i]) / 16);
        }

        return new Density(coarse, values);
    }

    private static int Beside(int index, int count, bool periodic)
        => (uint)index < (uint)count ? index : periodic ? (index + count) % count : index < 0 ? -1 - index : 2 * count - 1 - index;

    private static Density Checked(Density density)
    {
        foreach (var value in density.Values)
            Require.That(value >= 0 && double.IsFinite(value), $"A density had the value {value}; it must be finite and not below 0.");
        Require.That(density.Mass > 0, "A density had no mass; it must have some.");
        return density.Normalised();
    }

    private static PlaneTransportResult Nothing(Density a, Density b)
    {
        var zero = new double[a.Values.Length];
        return new PlaneTransportResult
        {
            Bracket = TransportBracket.Exact(0),
            From = a,
            To = b,
            DisplacementX = zero,
            DisplacementY = zero,
            Potential = zero,
            Conjugate = zero,
            Iterations = 0,
            Method = PlaneMethod.Identical,
            StopReason = "The two densities were the same.",
            MisplacedMass = 0,
            GridBound = GridBound(a.Grid),
        };
    }

    private sealed class Solver(
        Density a, Density b, double distance, PlaneTransportOptions options, WorkerTeam team, CancellationToken cancellation)
    {
        private readonly Grid grid = a.Grid;
        private int iterations;

        public PlaneTransportResult Run()
        {
            var levels = Levels();
            var newton = new PlaneNewton(grid, team);
            newton.SetDensities(a.Values, b.Values);
            PlaneTransportResult? smooth = null;
            if (distance < 0.3 || levels.Count == 1)
            {
                StartFromBetter(newton, a, b);
                iterations += newton.Run(1e-5 * 2 * distance, options.NewtonSteps, cancellation);
                smooth = newton.Residual < 0.05 * distance ? Smooth(newton) : null;
                if (smooth is not null && IsNarrow(smooth))
                    return smooth;
            }

            var (potential, isSmooth) = ClimbLevels(levels);
            if (isSmooth && smooth is null)
            {
                potential.CopyTo(newton.Potential, 0);
                iterations += newton.Run(1e-5 * 2 * distance, options.NewtonSteps, cancellation);
                smooth = newton.Residual < 0.05 ? Smooth(newton) : null;
                if (smooth is not null && IsNarrow(smooth))
                    return smooth;
                if (smooth is not null)
                    newton.Potential.CopyTo(potential, 0);
            }

            var rough = Rough(potential);
            if (smooth is null)
                return rough;
            if (Width(smooth) <= Width(rough))
                return smooth;
            // Newton's dual value is the better one, the plan the better bound.
            var (low, high) = (Math.Max(smooth.Bracket.Low, rough.Bracket.Low), Math.Min(smooth.Bracket.High, rough.Bracket.High));
            var best = smooth.Bracket.Low > rough.Bracket.Low ? Math.Min(low, high) : low + Nearer * (high - low);
            return rough with { Bracket = new TransportBracket(best, Math.Min(low, high), Math.Max(low, high)) };
        }

        private bool IsNarrow(PlaneTransportResult result) => Width(result) <= options.Tolerance * result.Bracket.High;

        private static double Width(PlaneTransportResult result) => result.Bracket.High - result.Bracket.Low;

        private List<(Density A, Density B)> Levels()
        {
            var list = new List<(Density A, Density B)> { (a, b) };
            while (Math.Max(list[^1].A.Grid.Nx, list[^1].A.Grid.Ny) > CoarsestCells && list[^1].A.Grid.Halved() is { } half)
                list.Add((list[^1].A.CoarsenedTo(half), list[^1].B.CoarsenedTo(half)));
            return list;
        }

        // Potential for the finest grid from the coarser ones, and whether Newton's method held on the last of them.
        private (double[] Potential, bool IsSmooth) ClimbLevels(List<(Density A, Density B)> levels)
        {
            var potential = new double[levels[^1].A.Values.Length];
            var isSmooth = true;
            for (var l = levels.Count - 1; l >= 1; l--)
            {
                var (coarseA, coarseB) = levels[l];
                var coarse = coarseA.Grid;
                var first = l == levels.Count - 1;
                if (first)
                {
                    // The map that would be right for normal densities of these means and covariances.
                    var newton = new PlaneNewton(coarse, team);
                    newton.SetDensities(coarseA.Values, coarseB.Values);
                    AffineStart(coarseA, coarseB, newton.Potential);
                    iterations += newton.Run(1e-4 * distance, options.NewtonSteps, cancellation);
                    if (newton.Residual < 0.02)
                    {
                        potential = Refined(newton.Potential, coarse);
                        continue;
                    }
                }

                if (first)
                {
                    var ascent = new PlaneAscent(coarse, team);
                    ascent.SetDensities(coarseA.Values, coarseB.Values);
                    iterations += ascent.Run(options.AscentSteps, 1e-6, 1e-4, cancellation);
                    ascent.Potential.CopyTo(potential, 0);
                }

                if (isSmooth)
                {
                    var newton = new PlaneNewton(coarse, team);
                    newton.SetDensities(coarseA.Values, coarseB.Values);
                    if (first)
                        Blur(potential, coarse, newton.Potential);
                    else
                        potential.CopyTo(newton.Potential, 0);
                    iterations += newton.Run(1e-4 * distance, options.NewtonSteps, cancellation);
                    isSmooth = newton.Residual < 0.1;
                    if (isSmooth)
                        newton.Potential.CopyTo(potential, 0);
                }

                if (!isSmooth && !first)
                {
                    var ascent = new PlaneAscent(coarse, team);
                    ascent.SetDensities(coarseA.Values, coarseB.Values);
                    potential.CopyTo(ascent.Potential, 0);
                    iterations += ascent.Run(options.AscentSteps / 2, 1e-6, 1e-5, cancellation);
                    ascent.Potential.CopyTo(potential, 0);
                }

                potential = Refined(potential, coarse);
            }

            return (potential, isSmooth && levels.Count > 1);
        }

        private PlaneTransportResult Smooth(PlaneNewton newton)
        {
            var cells = grid.CellCount;
            var (dx, dy, f) = (new double[cells], new double[cells], new double[cells]);
            var minimisers = new int[cells];
            var transform = new CTransform(grid, 1, team);
            var phi = newton.Potential;
            transform.ApplyBetweenCenters(phi, f, dx, dy, minimisers);
            var low = Math.Sqrt(Math.Max(0, 2 * Dual(phi, f)));

            // Where φ is off the transform of its transform (far tails, where Newton's equation is faint) no mass arrives by the map of φ; there the
            // double transform stands in for it, whose map is monotone and carries all of a.
            var (back, dual) = (new double[cells], new double[cells]);
            for (var i = 0; i < cells; i++)
                dual[i] = -f[i];
            transform.ApplyBetweenCenters(dual, back, new double[cells], new double[cells], minimisers);
            var slack = Contact * (grid.X.Width * grid.X.Width + grid.Y!.Width * grid.Y.Width);
            for (var i = 0; i < cells; i++)
                dual[i] = Math.Abs(phi[i] + back[i]) > slack ? -back[i] : phi[i];
            newton.Evaluate(dual);
            double mass = 0, cost = 0;
            for (var i = 0; i < cells; i++)
            {
                mass += newton.Pulled[i];
                cost += newton.Pulled[i] * (newton.GradientX[i] * newton.GradientX[i] + newton.GradientY[i] * newton.GradientY[i]);
            }

            var pulled = (double[])newton.Pulled.Clone();
            var scale = 1 / (mass * grid.CellVolume);
            SpanKernels.Scale(pulled, scale);
            var high = Math.Sqrt(cost / mass) + MoveBound(pulled, b.Values);
            if (high - low > 0.1 * options.Tolerance * high)
            {
                var ascent = new PlaneAscent(grid, team);
                ascent.SetDensities(a.Values, b.Values);
                high = Math.Min(high, Math.Sqrt(ascent.RoundedPlanCost(dx, dy, new PlaneRounding(grid))));
            }

            return Result(low, high, low, phi, f, dx, dy, PlaneMethod.Newton, 0.5 * newton.Residual,
                "Newton's method reached its tolerance or the limit of the grid.");
        }

        // √(flux cost) + √(plan cost of the rest): an upper bound of W2 between two densities of one mass.
        private double MoveBound(double[] there, double[] wanted)
        {
            var (nx, ny) = (grid.Nx, grid.Ny);
            var elliptic = new PlaneElliptic(nx, ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic, grid.X.Width, grid.Y.Width, team);
            var weight = new double[grid.CellCount];
            var least = 1e-13 * SpanKernels.MaxAbs(wanted);
            var right = new double[grid.CellCount];
            double defect = 0, held = 0;
            for (var i = 0; i < weight.Length; i++)
            {
                weight[i] = IsNear(there[i], wanted[i], least) ? LogarithmicMean(there[i], wanted[i]) : least;
                if (weight[i] == least)
                    continue;
                right[i] = wanted[i] - there[i];
                defect += right[i];
                held += wanted[i];
            }

            // Balanced in proportion to the mass there: an even correction would have to flow through the tails.
            for (var i = 0; i < right.Length && held > 0; i++)
                right[i] -= weight[i] == least ? 0 : wanted[i] * (defect / held);

            for (var row = 0; row < ny; row++)
            {
                var faceX = elliptic.RowX(row);
                var faceY = elliptic.RowY(row);
                for (var i = 0; i < nx; i++)
                {
                    var here = weight[row * nx + i];
                    faceX[i] = Harmonic(here, weight[row * nx + (i + 1) % nx], least) / (grid.X.Width * grid.X.Width);
                    faceY[i] = Harmonic(here, weight[(row + 1) % ny * nx + i], least) / (grid.Y.Width * grid.Y.Width);
                }
            }

            elliptic.Prepare();
            var p = new double[right.Length];
            elliptic.Solve(right, p, 1e-7, 60);

            // The flux between cells that both hold mass is paid for; what it leaves behind moves by a plan.
            var flux = 0.0;
            var arrived = new double[right.Length];
            for (var i = 0; i < right.Length; i++)
                arrived[i] = (there[i] - wanted[i]) * grid.CellVolume;
            for (var row = 0; row < ny; row++)
            {
                for (var i = 0; i < nx; i++)
                {
                    var here = row * nx + i;
                    if (i + 1 < nx || grid.X.IsPeriodic)
                        Cross(here, row * nx + (i + 1) % nx, 1 / (grid.X.Width * grid.X.Width));
                    if (row + 1 < ny || grid.Y.IsPeriodic)
                        Cross(here, (row + 1) % ny * nx + i, 1 / (grid.Y.Width * grid.Y.Width));
                }
            }

            var rest = new PlaneRounding(grid).Settle(arrived, null, null, new double[right.Length]);
            return Math.Sqrt(flux) + Math.Sqrt(Math.Max(0, rest));

            void Cross(int from, int to, double perSquare)
            {
                var face = Harmonic(weight[from], weight[to], least);
                if (face == least)
                    return;
                var moved = face * perSquare * (p[from] - p[to]) * grid.CellVolume;
                arrived[from] += moved;
                arrived[to] -= moved;
                flux += moved * (p[from] - p[to]);
            }
        }

        // A flux is dear where one density is a small part of the other: such cells are left to the plan.
        private static bool IsNear(double first, double second, double least) => Math.Min(first, second) > Math.Max(least, 0.25 * Math.Max(first, second));

        // Exactly the floor where either cell is on it.
        private static double Harmonic(double first, double second, double floor)
            => first == floor || second == floor ? floor : 2 * first * second / (first + second);

        private static double LogarithmicMean(double first, double second)
        {
            var ratio = (second - first) / first;
            return Math.Abs(ratio) < 1e-4 ? first * (1 + ratio / 2 - ratio * ratio / 12) : (second - first) / Math.Log(second / first);
        }

        private PlaneTransportResult Rough(double[] potential)
        {
            var ascent = new PlaneAscent(grid, team);
            ascent.SetDensities(a.Values, b.Values);
            potential.CopyTo(ascent.Potential, 0);
            var steps = ascent.Run(Math.Max(4, options.AscentSteps / 4), 1e-6, 1e-6, cancellation);
            iterations += steps;
            var cells = grid.CellCount;
            var (dx, dy, f) = (new double[cells], new double[cells], new double[cells]);
            new CTransform(grid, 1, team).ApplyBetweenCenters(ascent.Potential, f, dx, dy, new int[cells]);
            var low = Math.Sqrt(Math.Max(0, 2 * Dual(ascent.Potential, f)));
            var rounding = new PlaneRounding(grid);
            var bySlope = ascent.RoundedPlanCost(ascent.DisplacementX, ascent.DisplacementY, rounding);
            var byMinimum = ascent.RoundedPlanCost(dx, dy, rounding);
            if (bySlope < byMinimum)
            {
                ascent.DisplacementX.CopyTo(dx, 0);
                ascent.DisplacementY.CopyTo(dy, 0);
            }

            var high = Math.Sqrt(Math.Min(bySlope, byMinimum));
            return Result(low, high, low + Nearer * (high - low), ascent.Potential, f, dx, dy, PlaneMethod.Ascent, ascent.Misplaced,
                steps < Math.Max(4, options.AscentSteps / 4) ? "The dual value no longer rose." : "The limit of iterations was reached.");
        }

        private double Dual(double[] phi, double[] f)
        {
            var (sum, rest) = (0.0, 0.0);
            for (var i = 0; i < phi.Length; i++)
            {
                sum += (a.Values[i] - b.Values[i]) * phi[i];
                rest += a.Values[i] * (f[i] - phi[i]);
            }

            return (sum + rest) * grid.CellVolume;
        }

        private PlaneTransportResult Result(
            double low, double high, double best, double[] phi, double[] f, double[] dx, double[] dy, PlaneMethod method, double misplaced, string reason)
            => new()
            {
                Bracket = new TransportBracket(best, Math.Min(low, high), Math.Max(low, high)),
                From = a,
                To = b,
                DisplacementX = dx,
                DisplacementY = dy,
                Potential = (double[])phi.Clone(),
                Conjugate = f,
                Iterations = iterations,
                Method = method,
                StopReason = reason,
                MisplacedMass = misplaced,
                GridBound = GridBound(grid),
            };

        // From rest or from the affine map, whichever leaves less mass out of place.
        private static void StartFromBetter(PlaneNewton newton, Density a, Density b)
        {
            newton.Evaluate(newton.Potential);
            var atRest = newton.Residual;
            AffineStart(a, b, newton.Potential);
            newton.Evaluate(newton.Potential);
            if (atRest <= newton.Residual)
                Array.Clear(newton.Potential);
        }

        // φ with y + ∇φ = mean of a + M (y − mean of b), M = A # B⁻¹ the geometric mean of the covariance of a and the inverse covariance of b
        // (the optimal map between normal densities: M. Knott, C. Smith, J. Optim. Theory Appl. 43 (1984) 39-49); nothing moves along a circle.
        private static void AffineStart(Density a, Density b, double[] potential)
        {
            var grid = a.Grid;
            var (meanX, meanY, varianceX, varianceY, covariance) = Moments(a);
            var (toX, toY, toVarianceX, toVarianceY, toCovariance) = Moments(b);
            var (mxx, mxy, myy) = (1.0, 0.0, 1.0);
            var (px, py) = (grid.X.IsPeriodic, grid.Y!.IsPeriodic);
            if (px || py)
            {
                mxx = px ? 1 : Math.Sqrt(varianceX / toVarianceX);
                myy = py ? 1 : Math.Sqrt(varianceY / toVarianceY);
            }
            else
            {
                var alpha = Math.Sqrt(varianceX * varianceY - covariance * covariance);
                var square = toVarianceX * toVarianceY - toCovariance * toCovariance;
                var beta = 1 / Math.Sqrt(square);
                var (ixx, ixy, iyy) = (toVarianceY / square, -toCovariance / square, toVarianceX / square);
                (mxx, mxy, myy) = (varianceX / alpha + ixx / beta, covariance / alpha + ixy / beta, varianceY / alpha + iyy / beta);
                var scale = Math.Sqrt(alpha * beta / (mxx * myy - mxy * mxy));
                (mxx, mxy, myy) = (mxx * scale, mxy * scale, myy * scale);
            }

            for (var i = 0; i < potential.Length; i++)
            {
                var (x, y) = (grid.X.Center(i % grid.Nx), grid.Y.Center(i / grid.Nx));
                var (u, v) = (x - toX, y - toY);
                potential[i] = 0.5 * ((mxx - 1) * u * u + 2 * mxy * u * v + (myy - 1) * v * v) + (px ? 0 : (meanX - toX) * x) + (py ? 0 : (meanY - toY) * y);
            }
        }

        private static (double MeanX, double MeanY, double VarianceX, double VarianceY, double Covariance) Moments(Density density)
        {
            var grid = density.Grid;
            double sx = 0, sy = 0, mass = 0;
            for (var i = 0; i < density.Values.Length; i++)
            {
                var w = density.Values[i];
                mass += w;
                sx += w * grid.X.Center(i % grid.Nx);
                sy += w * grid.Y!.Center(i / grid.Nx);
            }

            var (mx, my) = (sx / mass, sy / mass);
            double xx = 0, xy = 0, yy = 0;
            for (var i = 0; i < density.Values.Length; i++)
            {
                var (w, u, v) = (density.Values[i], grid.X.Center(i % grid.Nx) - mx, grid.Y!.Center(i / grid.Nx) - my);
                xx += w * u * u;
                xy += w * u * v;
                yy += w * v * v;
            }

            // A density in one row or column of cells still has the width of a cell.
            var (cellX, cellY) = (grid.X.Width * grid.X.Width / 12, grid.Y!.Width * grid.Y.Width / 12);
            return (mx, my, Math.Max(xx / mass, cellX), Math.Max(yy / mass, cellY), xy / mass * 0.999999);
        }

        // Two passes of (1, 2, 1)/4 along each axis: takes the facets of a transform over centres out of the second derivatives.
        private static void Blur(double[] source, Grid grid, double[] target)
        {
            var (nx, ny) = (grid.Nx, grid.Ny);
            var middle = new double[source.Length];
            source.CopyTo(target, 0);
            for (var pass = 0; pass < 2; pass++)
            {
                for (var i = 0; i < target.Length; i++)
                {
                    var (row, column) = Math.DivRem(i, nx);
                    var left = row * nx + (column > 0 ? column - 1 : grid.X.IsPeriodic ? nx - 1 : 0);
                    var right = row * nx + (column < nx - 1 ? column + 1 : grid.X.IsPeriodic ? 0 : column);
                    middle[i] = 0.25 * (target[left] + 2 * target[i] + target[right]);
                }

                for (var i = 0; i < target.Length; i++)
                {
                    var (row, column) = Math.DivRem(i, nx);
                    var below = (row > 0 ? row - 1 : grid.Y!.IsPeriodic ? ny - 1 : 0) * nx + column;
                    var above = (row < ny - 1 ? row + 1 : grid.Y!.IsPeriodic ? 0 : row) * nx + column;
                    target[i] = 0.25 * (middle[below] + 2 * middle[i] + middle[above]);
                }
            }
        }

        // Interpolation to the grid of half the width: its centres lie ¼ of a coarse cell to either side. Beyond a wall the parabola through three cells.
        private static double[] Refined(double[] coarse, Grid grid)
        {
            var (nx, ny) = (grid.Nx, grid.Ny);
            var wide = new double[2 * nx * ny];
            for (var row = 0; row < ny; row++)
            {
                for (var i = 0; i < nx; i++)
                {
                    (wide[row * 2 * nx + 2 * i], wide[row * 2 * nx + 2 * i + 1]) = Quarters(
                        At(coarse, row * nx, 1, i - 2, nx, grid.X.IsPeriodic), At(coarse, row * nx, 1, i - 1, nx, grid.X.IsPeriodic),
                        coarse[row * nx + i],
                        At(coarse, row * nx, 1, i + 1, nx, grid.X.IsPeriodic), At(coarse, row * nx, 1, i + 2, nx, grid.X.IsPeriodic));
                }
            }

            var fine = new double[4 * nx * ny];
            var step = 2 * nx;
            for (var row = 0; row < ny; row++)
            {
                for (var i = 0; i < step; i++)
                {
                    (fine[2 * row * step + i], fine[(2 * row + 1) * step + i]) = Quarters(
                        At(wide, i, step, row - 2, ny, grid.Y!.IsPeriodic), At(wide, i, step, row - 1, ny, grid.Y.IsPeriodic),
                        wide[row * step + i],
                        At(wide, i, step, row + 1, ny, grid.Y.IsPeriodic), At(wide, i, step, row + 2, ny, grid.Y.IsPeriodic));
                }
            }

            return fine;
        }

        private static double At(double[] field, int start, int step, int index, int count, bool periodic)
        {
            if ((uint)index < (uint)count)
                return field[start + step * index];
            if (periodic)
                return field[start + step * ((index + count) % count)];
            var (beyond, edge, inward) = index < 0 ? (-index, start, step) : (index - count + 1, start + step * (count - 1), -step);
            var (v0, v1, v2) = (field[edge], field[edge + inward], field[edge + 2 * inward]);
            return beyond == 1 ? v0 + (2 * (v0 - v1) - (v1 - v2)) : v0 + (5 * (v0 - v1) - 3 * (v1 - v2));
        }

        // Weights of the quartic through five neighbours at −¼ and +¼.
        private static (double Left, double Right) Quarters(double v0, double v1, double v2, double v3, double v4)
        {
            // Stirling's formula at s = ¼: s²/2 δ² + s²(s² − 1)/24 δ⁴ and s μδ + s(s² − 1)/6 μδ³.
            var second = v1 - 2 * v2 + v3;
            var fourth = v0 - 4 * v1 + 6 * v2 - 4 * v3 + v4;
            var symmetric = v2 + second / 32 + fourth * (0.0625 * (0.0625 - 1) / 24);
            var slope = (v3 - v1) / 2;
            var third = (v4 - 2 * v3 + 2 * v1 - v0) / 2;
            var odd = 0.25 * slope + third * (0.25 * (0.0625 - 1) / 6);
            return (symmetric - odd, symmetric + odd);
        }
    }
}
