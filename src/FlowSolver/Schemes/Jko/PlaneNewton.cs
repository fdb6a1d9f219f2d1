using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Jko;

/// <summary>What a Newton solve did.</summary>
/// <param name="Converged">Whether the tolerance was reached.</param>
/// <param name="Newton">Newton steps.</param>
/// <param name="Products">Krylov products in all.</param>
/// <param name="Residual">The residual left.</param>
internal readonly record struct PlaneSolve(bool Converged, int Newton, int Products, PlaneResidual Residual);

/// <summary>Newton's method on <see cref="PlaneEquation"/> on one grid, with preconditioned GMRES for its linear systems.</summary>
internal sealed class PlaneNewton
{
    private const int Restart = 14;
    private readonly AlternatingDirections preconditioner;
    private readonly Gmres krylov;
    private readonly double[] correction;
    private readonly double[] right;
    private readonly Action<double[], double[]> apply;
    private readonly Action<double[], double[]> precondition;

    public PlaneNewton(Potential potential, double temperature, Grid grid, WorkerTeam team)
    {
        Equation = new PlaneEquation(potential, temperature, grid, team);
        preconditioner = new AlternatingDirections(Equation.Plane, team);
        krylov = new Gmres(Equation.Plane.Length, Restart, team);
        correction = Equation.Plane.NewField();
        right = Equation.Plane.NewField();
        apply = Equation.ApplyDerivative;
        precondition = preconditioner.Apply;
    }

    public PlaneEquation Equation { get; }

    /// <summary>Trace of the solve for diagnosis; null in use.</summary>
    internal Action<string>? Trace { get; set; }

    /// <summary>
    /// Solves the equation linearised about φ = 0: φ − τ(T Δφ + T∇log ρₙ·∇φ) = φₙ, an average of φₙ with positive weights.
    /// It is a good first guess, and the stand-in for the exact step where there is next to no mass.
    /// </summary>
    /// <param name="old">φₙ.</param>
    /// <param name="movement">∫ρₙ|φ − φₙ|/T, the change of log ρ in the mean: 0 up to rounding at equilibrium.</param>
    /// <returns>Krylov products.</returns>
    public int SolveLinearised(double[] old, out double movement)
    {
        Equation.Bare = true;
        Array.Clear(Equation.Linear);
        Equation.Evaluate(Equation.Linear, true);
        var plane = Equation.Plane;
        // The weights are ρₙ here; they are floored for the solve, so the movement is formed with φₙ itself.
        var products = SolveLinear(1e-4, 1e-3);
        Move(Equation.Linear, -1);
        Equation.Bare = false;
        var sum = 0.0;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            var line = 0.0;
            for (var i = row; i < row + plane.Nx; i++)
                line += Math.Exp((old[i] - Equation.CellPotential[i]) / Equation.Temperature) * Math.Abs(Equation.Linear[i] - old[i]);
            sum += line;
        }

        movement = sum * Equation.Grid.CellVolume / Equation.Temperature;
        return products;
    }

    /// <summary>Puts the start of the iteration in place: the linearised step, or what φ holds where that is kept and better.</summary>
    public void Start(double[] phi, bool keep)
    {
        var plane = Equation.Plane;
        if (keep)
        {
            for (var j = 0; j < plane.Ny; j++)
            {
                var row = plane.Row(j);
                for (var i = row; i < row + plane.Nx; i++)
                    phi[i] = Equation.Trust[i] * phi[i] + (1 - Equation.Trust[i]) * Equation.Linear[i];
            }

            var kept = Equation.Evaluate(phi, false);
            var plain = Equation.Evaluate(Equation.Linear, false);
            if (kept.Weighted <= plain.Weighted)
                return;
        }

        Array.Copy(Equation.Linear, phi, phi.Length);
    }

    /// <summary>Newton's method for φ in place.</summary>
    /// <param name="phi">The start, and the result.</param>
    /// <param name="tolerance">Bound on the L1 norm of the residual of log ρ, ∫ρ|G|.</param>
    /// <param name="most">Newton steps allowed.</param>
    /// <param name="patient">Whether to go on when a full step is refused late.</param>
    public PlaneSolve Solve(double[] phi, double tolerance, int most, bool patient)
    {
        var products = 0;
        var residual = Equation.Evaluate(phi, true);
        for (var k = 0; ; k++)
        {
            Trace?.Invoke($"  newton {k}: L1 {residual.Weighted:g4} L2 {Math.Sqrt(residual.Square):g4} mass {residual.Mass:g8} folded {residual.Folded}");
            if (residual.Weighted <= tolerance)
                return new PlaneSolve(true, k, products, residual);
            if (k == most || !double.IsFinite(residual.Weighted))
                return new PlaneSolve(false, k, products, residual);
            products += SolveLinear(0.01, 1e-8);
            var before = residual.Weighted;
            var taken = 1.0;
            Move(phi, -1);
            residual = Equation.Evaluate(phi, true);
            for (var half = 0; half < 6 && !(residual.Weighted <= 2 * before); half++)
            {
                Move(phi, 0.5 * taken);
                taken *= 0.5;
                residual = Equation.Evaluate(phi, true);
                Trace?.Invoke($"    backtrack {taken}: {residual.Weighted}");
            }

            if (taken < 1 && k > 1 && !patient)
                return new PlaneSolve(false, k, products, residual);
        }
    }

    private int SolveLinear(double forcing, double weightFloor)
    {
        preconditioner.Prepare(Equation.DiffusionX, Equation.DriftX, Equation.DiffusionY, Equation.DriftY, Equation.TypicalDiffusion);
        FloorWeights(weightFloor);
        Array.Copy(Equation.Residual, right, right.Length);
        var (used, reached) = krylov.Solve(right, correction, Equation.Weights, apply, precondition, forcing, 28);
        Trace?.Invoke($"     gmres {used} products, {reached:g3}, typical diffusion {Equation.TypicalDiffusion:g4}");
        return used;
    }

    /// <summary>Sets where the linearised step stands in: where its density is below this share of its maximum.</summary>
    public void SetTail(double tailDensity)
    {
        var plane = Equation.Plane;
        var most = double.NegativeInfinity;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
                most = Math.Max(most, Equation.Linear[i] - Equation.CellPotential[i]);
        }

        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
            {
                var depth = (most - Equation.Linear[i] + Equation.CellPotential[i]) / Equation.Temperature;
                Equation.Trust[i] = 1 / (1 + tailDensity * Math.Exp(Math.Min(depth, 600)));
            }
        }
    }

    private void Move(double[] phi, double factor)
    {
        var plane = Equation.Plane;
        for (var j = 0; j < plane.Ny; j++)
            SpanKernels.AddScaled(phi.AsSpan(plane.Row(j), plane.Nx), factor, correction.AsSpan(plane.Row(j), plane.Nx));
    }

    // Tails count a little, so that the solve does not leave them to chance.
    private void FloorWeights(double floor)
    {
        var plane = Equation.Plane;
        var most = 0.0;
        for (var j = 0; j < plane.Ny; j++)
        {
            foreach (var weight in Equation.Weights.AsSpan(plane.Row(j), plane.Nx))
                most = Math.Max(most, weight);
        }

        for (var j = 0; j < plane.Ny; j++)
        {
            var row = Equation.Weights.AsSpan(plane.Row(j), plane.Nx);
            for (var i = 0; i < row.Length; i++)
                row[i] = Math.Max(row[i], most * floor);
        }
    }
}
