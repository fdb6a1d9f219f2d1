using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Schemes.Jko;

/// <summary>A run of JKO steps in the plane, each certified by a duality gap.</summary>
/// <remarks>
/// <para>ρₙ₊₁ minimises W2²(ρ, ρₙ)/(2τ) + F(ρ) with the true W2; τ is the step times the mobility. The unknown is φ = V + T log ρₙ₊₁ on the cell
/// centres, from the Monge-Ampère form of the optimality condition (<see cref="PlaneEquation"/>), by Newton's method (<see cref="PlaneNewton"/>).
/// Order 1 in τ; 2 in the cell width where densities are smooth. Kept exactly: mass, sign, equilibrium to rounding; Gaussians in quadratic
/// potentials up to the walls. The free energy falls up to the gap.</para>
/// <para>A step starts from the linearised step or from the two steps before. Where the density is below 10⁻¹⁰ of its maximum the linearised step
/// stands in for the exact one; where that does not settle, also in tails that the step empties faster than the grid can show. What does
/// not settle at all is solved as the convex problem it is on at most 64 × 64 cells (<see cref="PlanePrimal"/>) and then polished wherever the grid
/// resolves the map; the report says so. Jumps of the start are spread over about two cells, and the report of the first step says so.</para>
/// <para>Report: iterations are Krylov products; the residual is ∫ρ|G|, the L1 norm of what is left of the equation for log ρ (10⁻⁹, less near
/// equilibrium, or up to 10⁻⁴ of the mean change of log ρ where tails do not settle); the gap is that of <see cref="PlaneCertificate"/>. It proves
/// the density that the map carries; the one handed out, e^((φ−V)/T), differs from that by the residual, KL ≤ gap/T. Since the objective is
/// (1/τ)-convex along generalised geodesics for convex V, a relative gap g puts the proved density within √g of the distance moved from the exact step.</para>
/// <para>Cost: 3 to 5 linear systems of some few products each, independent of the grid; about 55 doubles a cell. Non-convex V: convexity, and
/// with it uniqueness, needs 1 + τ min D²V &gt; 0; beyond that the gap need not close even at a minimum.</para>
/// Sources: R. Jordan, D. Kinderlehrer, F. Otto, SIAM J. Math. Anal. 29 (1998) 1-17; J.-D. Benamou, G. Carlier, Q. Mérigot, É. Oudet, Numer. Math.
/// 134 (2016) 611-636; G. Loeper, F. Rapetti, C. R. Acad. Sci. Paris 340 (2005) 319-324 (from memory).
/// </remarks>
internal sealed class JkoPlaneRun : FlowRun
{
    /// <summary>Bound on ∫ρ|G|, the L1 norm of what is left of the equation for log ρ.</summary>
    private const double Tolerance = 1e-9;
    private const int MostNewtonSteps = 14;

    // Share of the maximum below which the start is levelled off.
    private const double NegligibleDensity = 1e-13;

    // A relative gap that calls for no second opinion.
    private const double GoodGap = 1e-4;

    // Residual relative to the change of log ρ up to which the certificate is asked.
    private const double LooseShare = 1e-4;
    private const int PrimalCells = 64;

    // What is tried in turn. Tail: density relative to its maximum below which the linearised step stands in. Near: how far from solving the
    // equation (in log ρ) the linearised step may be for a cell to count, if its density is below Share of the maximum. Held: whether tails
    // may move by T at most in a Newton step.
    private static readonly (double Tail, double Near, double Share, bool Held)[] FirstAttempts =
    [
        (1e-10, double.PositiveInfinity, 0, false),
        (1e-8, double.PositiveInfinity, 0, false),
        (1e-8, 1, 1e-2, true),
        (1e-6, 1, 1e-2, true),
    ];

    // Later steps find tails that have settled: they are held from the beginning.
    private static readonly (double Tail, double Near, double Share, bool Held)[] LaterAttempts =
    [
        (1e-10, double.PositiveInfinity, 0, true),
        (1e-8, 1, 1e-2, true),
        (1e-6, 1, 1e-2, true),
        (1e-6, 0.5, 0.1, true),
    ];

    private readonly double gapTolerance;
    private readonly PlaneNewton newton;
    private readonly PlaneEquation equation;
    private readonly PlaneCertificate certificate;
    private PlaneSpline nextSpline;
    private double[] current;
    private double[] next;
    private double[] before;
    private double[] trial;
    private double lastStep;
    private PlanePrimal? primal;
    private bool startWasSpread;
    private (Way Way, double Residual, PlaneProof Proof) best;
    private double bestGap;

    public JkoPlaneRun(GridProblem problem, Density start, WorkerTeam team, double gapTolerance) : base(problem, team)
    {
        this.gapTolerance = gapTolerance;
        newton = new PlaneNewton(problem.Problem.Potential, problem.Problem.Temperature, problem.Grid, team);
        equation = newton.Equation;
        nextSpline = new PlaneSpline(problem.Grid, equation.Plane, team);
        certificate = new PlaneCertificate(problem.Problem.Potential, equation, nextSpline, team);
        current = equation.Plane.NewField();
        next = equation.Plane.NewField();
        before = equation.Plane.NewField();
        trial = equation.Plane.NewField();
        LoadStart(start);
        Normalise(current);
        equation.Previous.Fit(current, freeAtWalls: true);
    }

    /// <summary>Hears of each Newton step, for diagnosis; null in use.</summary>
    internal Action<string>? Trace
    {
        get => newton.Trace;
        set => newton.Trace = value;
    }

    public override void WriteDensity(Span<double> destination)
    {
        Require.Length(destination.Length, Problem.Grid.CellCount);
        var plane = equation.Plane;
        var inverseT = 1 / equation.Temperature;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = 0; i < plane.Nx; i++)
                destination[j * plane.Nx + i] = Math.Exp((current[row + i] - equation.CellPotential[row + i]) * inverseT);
        }

        SpanKernels.Scale(destination, 1 / (SpanKernels.Sum(destination) * Problem.Grid.CellVolume));
    }

    protected override StepReport AdvanceCore(double step)
    {
        equation.Step = step * Problem.Problem.Mobility;
        var products = newton.SolveLinearised(current, out var movement);
        if (movement <= 1e-13)
            return new StepReport(products, 0, 0, 0);
        var tolerance = Math.Clamp(1e-5 * movement, 1e-14, Tolerance);
        best = (Way.None, 0, new PlaneProof(double.NaN, 0, 0, 0));
        bestGap = double.PositiveInfinity;
        SolveDirectly(step, movement, tolerance, ref products);
        if (!(bestGap <= GoodGap))
            SolveThroughPrimal(tolerance, ref products);
        nextSpline.Fit(next);
        var (way, residual, proof) = best;
        var gap = proof.RelativeGap(equation.Temperature);
        (equation.Previous, nextSpline) = (nextSpline, equation.Previous);
        (before, current, next) = (current, next, before);
        lastStep = step;
        return new StepReport(products, residual, gap, proof.Distance, Failure(gap), Warning(way, StepsTaken == 0 && startWasSpread));
    }

    // Newton's method from the linearised step or from the steps before; the usual case is the first attempt.
    private void SolveDirectly(double step, double movement, double tolerance, ref int products)
    {
        var sameStep = StepsTaken > 0 && step == lastStep;
        foreach (var (tail, near, share, held) in StepsTaken == 0 ? FirstAttempts : LaterAttempts)
        {
            newton.SetTail(tail);
            newton.HoldTails = held;
            var first = tail == FirstAttempts[0].Tail;
            if (double.IsFinite(near))
                newton.DistrustUnresolved(near, share);
            if (first && sameStep)
            {
                for (var i = 0; i < trial.Length; i++)
                    trial[i] = 2 * current[i] - before[i];
            }

            newton.Start(trial, keep: first && sameStep);
            var solve = newton.Solve(trial, tolerance, MostNewtonSteps, patient: false);
            products += solve.Products;
            // What is left where there is next to no mass need not matter: the certificate has the last word.
            if (!solve.Converged && !(solve.Residual.Weighted <= LooseShare * movement))
                continue;
            if (!solve.Converged)
                newton.PatchUnsolved(trial);
            newton.SmoothTails(trial);
            Consider(Way.Direct, solve.Residual.Weighted);
            if (bestGap <= GoodGap)
                return;
        }
    }

    // The convex problem on a coarse grid, then Newton's method wherever the fine grid resolves the map.
    private void SolveThroughPrimal(double tolerance, ref int products)
    {
        StandInFromPrimal();
        Array.Copy(equation.Linear, trial, trial.Length);
        newton.SetTail(FirstAttempts[0].Tail);
        newton.HoldTails = true;
        Consider(Way.Coarse, equation.Evaluate(trial, false).Weighted);
        newton.DistrustUnresolved(1, 2);
        newton.Start(trial, keep: false);
        var solve = newton.Solve(trial, tolerance, MostNewtonSteps, patient: true);
        products += solve.Products;
        Consider(Way.Polished, solve.Residual.Weighted);
    }

    // Certifies the trial and keeps it when its gap is the least so far.
    private void Consider(Way way, double residual)
    {
        Normalise(trial);
        nextSpline.Fit(trial);
        var proof = certificate.Prove(trial, current, nextSpline);
        var gap = Math.Abs(proof.RelativeGap(equation.Temperature));
        newton.Trace?.Invoke($"  {way}: relative gap {gap:g4}");
        if (!(gap < bestGap) && best.Way != Way.None)
            return;
        bestGap = double.IsNaN(gap) ? double.PositiveInfinity : gap;
        best = (way, residual, proof);
        (next, trial) = (trial, next);
    }

    private void StandInFromPrimal()
    {
        var grid = Problem.Grid;
        if (primal is null)
        {
            var coarse = new Grid(new Axis(grid.X.Interval, Math.Min(grid.Nx, PrimalCells)), new Axis(grid.Y!.Interval, Math.Min(grid.Ny, PrimalCells)));
            primal = new PlanePrimal(Problem.Problem.Potential, equation.Temperature, coarse);
        }

        var fine = new double[grid.CellCount];
        WriteDensity(fine);
        var density = new double[primal.Grid.CellCount];
        PlaneRestriction.Average(grid, fine, primal.Grid, density);
        var map = new double[density.Length];
        primal.Solve(density, equation.Step, map);
        var plane = new PaddedPlane(primal.Grid.Nx, primal.Grid.Ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic);
        var spline = new PlaneSpline(primal.Grid, plane, Team);
        var field = plane.NewField();
        plane.Load(map, field);
        spline.Fit(field);
        var x = grid.X.Centers();
        var y = new double[grid.Nx];
        var (sx, sy) = (new double[grid.Nx], new double[grid.Nx]);
        for (var j = 0; j < grid.Ny; j++)
        {
            y.AsSpan().Fill(grid.Y.Center(j));
            spline.Evaluate(x, y, fine.AsSpan(j * grid.Nx, grid.Nx), sx, sy);
        }

        // The map's potential is smooth where the step's may have ridges: it goes to the fine grid, and the transform is taken there.
        var transform = new CTransform(grid, 1, Team);
        var result = new double[fine.Length];
        transform.ApplyBetweenCenters(fine, result, new double[fine.Length], new double[fine.Length], new int[fine.Length]);
        SpanKernels.Scale(result, -1 / equation.Step);
        equation.Plane.Load(result, equation.Linear);
        Normalise(equation.Linear);
    }

    private string? Failure(double gap) => Math.Abs(gap) <= gapTolerance
        ? null
        : FormattableString.Invariant(
            $"The duality gap of the step was {gap:g3} of its transport cost; it must be at most {gapTolerance:g3}. Take a shorter step or more cells.");

    private static string? Warning(Way way, bool spread)
    {
        const string torn = "Where the map tears within a cell the step was taken from a coarse grid.";
        const string coarse = "The step was solved on a coarse grid only: the map tears where the fine grid cannot follow.";
        const string jumps = "The start jumps from cell to cell; its jumps were spread over about two cells.";
        return (way, spread) switch
        {
            (Way.Direct or Way.None, false) => null,
            (Way.Direct or Way.None, true) => jumps,
            (Way.Polished, false) => torn,
            (Way.Polished, true) => jumps + " " + torn,
            (_, false) => coarse,
            (_, true) => jumps + " " + coarse,
        };
    }

    private enum Way
    {
        None,
        Direct,
        Coarse,
        Polished,
    }

    // Scales e^((φ−V)/T) to mass 1 by a constant in φ; returns the mass before.
    private double Normalise(double[] phi)
    {
        var plane = equation.Plane;
        var temperature = equation.Temperature;
        var most = double.NegativeInfinity;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
                most = Math.Max(most, phi[i] - equation.CellPotential[i]);
        }

        var mass = 0.0;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            var line = 0.0;
            for (var i = row; i < row + plane.Nx; i++)
                line += Math.Exp((phi[i] - equation.CellPotential[i] - most) / temperature);
            mass += line;
        }

        var shift = most + temperature * Math.Log(mass * Problem.Grid.CellVolume);
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
                phi[i] -= shift;
        }

        return Math.Exp(shift / temperature);
    }

    private void LoadStart(Density start)
    {
        var plane = equation.Plane;
        var temperature = equation.Temperature;
        var logs = PlaneStart.LogDensity(start, out startWasSpread);
        var most = double.NegativeInfinity;
        foreach (var value in logs)
            most = Math.Max(most, value);
        var least = most + Math.Log(NegligibleDensity);
        var high = double.NegativeInfinity;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = 0; i < plane.Nx; i++)
            {
                var level = logs[j * plane.Nx + i];
                current[row + i] = equation.CellPotential[row + i] + temperature * level;
                if (level >= least)
                    high = Math.Max(high, current[row + i]);
            }
        }

        // Where there is next to no mass φ need not rise any further: a step would only have to empty a strip there.
        var width = 3 * temperature;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
            {
                if (current[i] > high)
                    current[i] = high + width * Saturate((current[i] - high) / width);
            }
        }
    }

    private static double Saturate(double excess) => excess < 6 ? Math.Tanh(excess) : 1;
}
