using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>A run of certified JKO steps in the plane; see <see cref="JkoScheme"/>.</summary>
internal sealed class JkoPlaneRun : FlowRun
{
    /// <summary>Bound on ∫ρ|G|, the L1 norm of what is left of the equation for log ρ.</summary>
    private const double Tolerance = 1e-9;
    private const int MostNewtonSteps = 14;

    // Share of the maximum below which the start is levelled off: φ keeps its values elsewhere.
    private const double NegligibleDensity = 1e-13;

    // Density, relative to its maximum, below which the linearised step stands in; raised where the exact one does not settle.
    private static readonly double[] TailDensities = [1e-10, 1e-8, 1e-6];
    private readonly double gapTolerance;
    private readonly PlaneNewton newton;
    private readonly PlaneEquation equation;
    private readonly PlaneCertificate certificate;
    private PlaneSpline nextSpline;
    private double[] current;
    private double[] next;
    private double[] before;
    private double lastStep;

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
        LoadStart(start);
        Normalise(current);
        equation.Previous.Fit(current);
    }

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
        var sameStep = StepsTaken > 0 && step == lastStep;
        var solve = default(PlaneSolve);
        var attempt = 0;
        for (; attempt < TailDensities.Length; attempt++)
        {
            newton.SetTail(TailDensities[attempt]);
            if (attempt == 0 && sameStep)
            {
                for (var i = 0; i < next.Length; i++)
                    next[i] = 2 * current[i] - before[i];
                newton.Start(next, keep: true);
            }
            else
            {
                newton.Start(next, keep: false);
            }

            solve = newton.Solve(next, tolerance, MostNewtonSteps, attempt == TailDensities.Length - 1);
            products += solve.Products;
            if (solve.Converged)
                break;
        }

        var normaliser = Normalise(next);
        nextSpline.Fit(next);
        var proof = certificate.Prove(next, current, nextSpline);
        var gap = proof.RelativeGap(equation.Temperature);
        (equation.Previous, nextSpline) = (nextSpline, equation.Previous);
        (before, current, next) = (current, next, before);
        lastStep = step;
        newton.Trace?.Invoke($"  proof {proof} relative {gap:g4} normaliser {normaliser:g9} tail attempt {attempt}");
        return new StepReport(products, solve.Residual.Weighted, gap, proof.Distance,
            Failure(solve, gap, tolerance), Warning(attempt));
    }

    private string? Failure(in PlaneSolve solve, double gap, double tolerance)
    {
        if (!(Math.Abs(gap) <= gapTolerance))
        {
            return FormattableString.Invariant(
                $"The duality gap of the step was {gap:g3} of its transport cost; it must be at most {gapTolerance:g3}. Take a shorter step or more cells.");
        }

        return solve.Converged || solve.Residual.Weighted <= 1e3 * tolerance
            ? null
            : FormattableString.Invariant($"The equation of the step was left with a residual of {solve.Residual.Weighted:g3}; it must fall below {tolerance:g3}. Take a shorter step.");
    }

    private static string? Warning(int attempt) => attempt switch
    {
        0 or 1 => null,
        _ => "Where the density is below a millionth of its maximum the linearised step stands in for the exact one.",
    };

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
        var most = 0.0;
        foreach (var value in start.Values)
            most = Math.Max(most, value);
        double low = double.PositiveInfinity, high = double.NegativeInfinity;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = 0; i < plane.Nx; i++)
            {
                var density = start.Values[j * plane.Nx + i];
                var phi = density > 0 ? equation.CellPotential[row + i] + temperature * Math.Log(density) : double.NegativeInfinity;
                current[row + i] = phi;
                if (density < NegligibleDensity * most)
                    continue;
                low = Math.Min(low, phi);
                high = Math.Max(high, phi);
            }
        }

        // What is added below must not gather in a deep well: at most this share of the mass in all.
        low = Math.Min(low, temperature * (Math.Log(NegligibleDensity) - Problem.LogPartition));
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
                current[i] = Level(current[i], low, high, 3 * temperature);
        }
    }

    // The identity between low and high; beyond, bends over to a constant within a few widths, with two continuous derivatives.
    private static double Level(double value, double low, double high, double width)
        => value > high ? high + width * Saturate((value - high) / width)
        : value < low ? low - width * Saturate((low - value) / width)
        : value;

    private static double Saturate(double excess) => excess < 6 ? Math.Tanh(excess) : 1;
}
