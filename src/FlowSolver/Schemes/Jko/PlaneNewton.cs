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
    private readonly double[] best;
    private readonly Action<double[], double[]> apply;
    private readonly Action<double[], double[]> precondition;

    public PlaneNewton(Potential potential, double temperature, Grid grid, WorkerTeam team)
    {
        Equation = new PlaneEquation(potential, temperature, grid, team);
        preconditioner = new AlternatingDirections(Equation.Plane, team);
        krylov = new Gmres(Equation.Plane.Length, Restart, team);
        correction = Equation.Plane.NewField();
        right = Equation.Plane.NewField();
        best = Equation.Plane.NewField();
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
        var least = residual;
        Array.Copy(phi, best, phi.Length);
        var k = 0;
        var refused = 0;
        for (; ; k++)
        {
            Trace?.Invoke($"  newton {k}: L1 {residual.Weighted:g4} L2 {Math.Sqrt(residual.Square):g4} mass {residual.Mass:g8} folded {residual.Folded}");
            if (Trace is not null) Worst(phi);
            if (residual.Weighted < least.Weighted)
            {
                least = residual;
                Array.Copy(phi, best, phi.Length);
            }

            if (residual.Weighted <= tolerance)
                return new PlaneSolve(true, k, products, residual);
            if (k == most || !double.IsFinite(residual.Weighted) || refused > (patient ? 3 : 0) || residual.Weighted > 1e3 * least.Weighted)
                break;
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
            }

            if (taken < 1 && k > 1)
                refused++;
        }

        Array.Copy(best, phi, phi.Length);
        return new PlaneSolve(false, k, products, least);
    }

    /// <summary>
    /// Leaves the equation out in cells where it is far from holding at the stand-in, and in their neighbours: there the map jumps within a cell and
    /// no value at the centre speaks for it.
    /// </summary>
    /// <param name="most">Largest |log ρ′ − log ρ| that counts as near.</param>
    public void DistrustUnresolved(double most)
    {
        var plane = Equation.Plane;
        Equation.Evaluate(Equation.Linear, false);
        Array.Copy(Equation.Residual, right, right.Length);
        plane.FillGhosts(right);
        var bound = most * Equation.Temperature;
        var count = 0;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
            {
                var near = true;
                for (var k = -1; k <= 1; k++)
                {
                    for (var l = -1; l <= 1; l++)
                        near &= Math.Abs(right[i + k * plane.Stride + l]) <= bound;
                }

                if (near)
                    continue;
                count++;
                Equation.Trust[i] = 0;
            }
        }

        Trace?.Invoke($"   distrusted {count} cells");
    }

    private void Worst(double[] phi)
    {
        var e = Equation; var best = 0.0; int bi = 0, bj = 0;
        for (var j = 0; j < e.Grid.Ny; j++) for (var i = 0; i < e.Grid.Nx; i++) { var k = e.Plane.Row(j) + i; var v = e.Weights[k] * e.Residual[k] * e.Residual[k]; if (v > best) (best, bi, bj) = (v, i, j); }
        var at = e.Plane.Row(bj) + bi; var s = e.Plane.Stride; var hx = e.Grid.X.Width; var hy = e.Grid.Y!.Width; var tau = e.Step;
        double gx = (phi[at + 1] - phi[at - 1]) / (2 * hx), gy = (phi[at + s] - phi[at - s]) / (2 * hy);
        double xx = 1 + tau * (phi[at + 1] - 2 * phi[at] + phi[at - 1]) / (hx * hx), yy = 1 + tau * (phi[at + s] - 2 * phi[at] + phi[at - s]) / (hy * hy), xy = tau * (phi[at + s + 1] - phi[at + s - 1] - phi[at - s + 1] + phi[at - s - 1]) / (4 * hx * hy);
        Trace!(FormattableString.Invariant($"     worst at ({e.Grid.X.Center(bi):f3},{e.Grid.Y.Center(bj):f3}) cell {bi},{bj} rho {e.Weights[at]:g3} G {e.Residual[at] / e.Temperature:g4} trust {e.Trust[at]:g3} Y ({e.Grid.X.Center(bi) + tau * gx:f3},{e.Grid.Y.Center(bj) + tau * gy:f3}) A {xx:f3} {xy:f3} {yy:f3} phi {phi[at]:g4} standin {e.Linear[at]:g4} share {best / e.Temperature / e.Temperature * e.Grid.CellVolume:g3} drift {e.DriftX[at]:g3} {e.DriftY[at]:g3} diff {e.DiffusionX[at]:g3} {e.DiffusionY[at]:g3}"));
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
