using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Schemes.Jko;

/// <summary>A run of certified JKO steps in the plane; see <see cref="JkoScheme"/>.</summary>
internal sealed class JkoPlaneRun : FlowRun
{
    /// <summary>Bound on ∫ρ|G|, the L1 norm of what is left of the equation for log ρ.</summary>
    private const double Tolerance = 1e-9;
    private const int MostNewtonSteps = 14;

    // Share of the maximum below which the start is levelled off: φ keeps its values elsewhere.
    internal static double NegligibleDensity = 1e-13;

    // Density, relative to its maximum, below which the linearised step stands in; raised where the exact one does not settle.
    internal static double[] TailDensities = [1e-10, 1e-8];

    // A gap that calls for no second opinion.
    private const double GoodGap = 1e-4;
    internal static int PrimalCells = 64;
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

    internal Action<string>? Trace
    {
        get => newton.Trace;
        set => certificate.Trace = newton.Trace = value;
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
        var solve = SolveDirectly(step, tolerance, ref products);
        var proof = default(PlaneProof);
        var way = Way.Direct;
        if (solve.Converged)
        {
            Normalise(next);
            nextSpline.Fit(next);
            proof = certificate.Prove(next, current, nextSpline);
            if (newton.Trace is not null)
            {
                var (mi, mv) = (0, 1e300);
                for (var j = 0; j < equation.Plane.Ny; j++) for (var i = 0; i < equation.Plane.Nx; i++) if (next[equation.Plane.Row(j) + i] < mv) (mi, mv) = (j * equation.Plane.Nx + i, next[equation.Plane.Row(j) + i]);
                var at = equation.Plane.Row(mi / equation.Plane.Nx) + mi % equation.Plane.Nx;
                newton.Trace($"   min phi {mv} at {mi % equation.Plane.Nx},{mi / equation.Plane.Nx} trust {equation.Trust[at]} lin {equation.Linear[at]} residual {equation.Residual[at]} neighbours {next[at - 1]:g4} {next[at + 1]:g4} {next[at - equation.Plane.Stride]:g4} {next[at + equation.Plane.Stride]:g4}");
            }
            newton.Trace?.Invoke($"  direct {proof} relative {proof.RelativeGap(equation.Temperature):g4}");
        }

        if (!solve.Converged || !(Math.Abs(proof.RelativeGap(equation.Temperature)) <= GoodGap))
            SolveThroughPrimal(tolerance, ref solve, ref proof, ref way, ref products);
        var gap = proof.RelativeGap(equation.Temperature);
        (equation.Previous, nextSpline) = (nextSpline, equation.Previous);
        (before, current, next) = (current, next, before);
        lastStep = step;
        newton.Trace?.Invoke($"  {way} proof {proof} relative {gap:g4}");
        return new StepReport(products, solve.Residual.Weighted, gap, proof.Distance, Failure(gap), Warning(way, StepsTaken == 0 && startWasSpread));
    }

    // Newton's method from the linearised step or from the steps before; the usual case.
    private PlaneSolve SolveDirectly(double step, double tolerance, ref int products)
    {
        var sameStep = StepsTaken > 0 && step == lastStep;
        var solve = default(PlaneSolve);
        for (var attempt = 0; attempt < TailDensities.Length; attempt++)
        {
            newton.SetTail(TailDensities[attempt]);
            if (attempt == 0 && sameStep)
            {
                for (var i = 0; i < next.Length; i++)
                    next[i] = 2 * current[i] - before[i];
            }

            newton.Start(next, keep: attempt == 0 && sameStep);
            solve = newton.Solve(next, tolerance, MostNewtonSteps, patient: false);
            products += solve.Products;
            if (solve.Converged)
                break;
        }

        return solve;
    }

    // The convex problem on a coarse grid, then Newton's method wherever the fine grid resolves the map. Keeps whichever has the least gap.
    private void SolveThroughPrimal(double tolerance, ref PlaneSolve solve, ref PlaneProof proof, ref Way way, ref int products)
    {
        var best = solve.Converged ? Math.Abs(proof.RelativeGap(equation.Temperature)) : double.PositiveInfinity;
        StandInFromPrimal();
        Array.Copy(equation.Linear, trial, trial.Length);
        if (Consider(ref best, ref proof))
        {
            way = Way.Coarse;
            solve = default;
        }

        newton.SetTail(TailDensities[0]);
        newton.DistrustUnresolved(1);
        newton.Start(trial, keep: false);
        var polished = newton.Solve(trial, tolerance, MostNewtonSteps, patient: true);
        products += polished.Products;
        if (Consider(ref best, ref proof))
        {
            way = Way.Polished;
            solve = polished;
        }

        nextSpline.Fit(next);
    }

    private bool Consider(ref double best, ref PlaneProof proof)
    {
        Normalise(trial);
        nextSpline.Fit(trial);
        var found = certificate.Prove(trial, current, nextSpline);
        var gap = Math.Abs(found.RelativeGap(equation.Temperature));
        newton.Trace?.Invoke($"  candidate {found} relative {found.RelativeGap(equation.Temperature):g4}");
        if (!(gap < best) && !double.IsPositiveInfinity(best))
            return false;
        best = gap;
        proof = found;
        (next, trial) = (trial, next);
        return true;
    }

    private void StandInFromPrimal()
    {
        var grid = Problem.Grid;
        if (primal is null)
        {
            var coarse = new Grid(new Axis(grid.X.Interval, Math.Min(grid.Nx, PrimalCells)), new Axis(grid.Y!.Interval, Math.Min(grid.Ny, PrimalCells)));
            primal = new PlanePrimal(Problem.Problem.Potential, equation.Temperature, coarse);
        }

        primal.Trace = newton.Trace;
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
            (Way.Direct, false) => null,
            (Way.Direct, true) => jumps,
            (Way.Polished, false) => torn,
            (Way.Polished, true) => jumps + " " + torn,
            (_, false) => coarse,
            (_, true) => jumps + " " + coarse,
        };
    }

    private enum Way
    {
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
