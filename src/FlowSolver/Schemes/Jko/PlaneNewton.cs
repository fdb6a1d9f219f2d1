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
    private const int MostProducts = 28;

    // Share of the largest density below which a cell belongs to the tails, where the step may be patched and smoothed.
    private const double TailShare = 1e-4;

    // Second difference of φ/T from cell to cell beyond which tails are smoothed.
    private const double LargestBend = 2;
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

    /// <summary>Whether cells of the tails may move by T at most in a step.</summary>
    public bool HoldTails { get; set; }

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
            if (HoldTails)
                LimitInTails(phi);
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
    /// <param name="densityShare">Cells above this share of the largest density of the stand-in are trusted all the same.</param>
    public void DistrustUnresolved(double most, double densityShare)
    {
        var plane = Equation.Plane;
        var highest = Highest(Equation.Linear);

        var top = highest + Equation.Temperature * Math.Log(densityShare);
        Equation.Evaluate(Equation.Linear, false);
        Array.Copy(Equation.Residual, right, right.Length);
        plane.FillGhosts(right);
        var bound = most * Equation.Temperature;
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

                if (near || Equation.Linear[i] - Equation.CellPotential[i] > top)
                    continue;
                Equation.Trust[i] = 0;
            }
        }

    }

    /// <summary>Puts the stand-in where the equation was left unsolved and neither density holds a noticeable share of the mass.</summary>
    public void PatchUnsolved(double[] phi)
    {
        var plane = Equation.Plane;
        Equation.Evaluate(phi, false);
        var most = Highest(phi);

        var low = most + Equation.Temperature * Math.Log(TailShare);
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
            {
                if (Math.Abs(Equation.Residual[i]) <= 0.05 * Equation.Temperature
                    || Math.Max(phi[i], Equation.Linear[i]) - Equation.CellPotential[i] > low)
                {
                    continue;
                }

                phi[i] = Equation.Linear[i];
            }
        }

    }

    /// <summary>
    /// Evens out φ where the density is below a share of its maximum and φ bends by more than a few T from cell to cell: there a spline through it
    /// would ring, and no step can follow what is narrower than a cell.
    /// </summary>
    public void SmoothTails(double[] phi)
    {
        const int sweeps = 12;
        var plane = Equation.Plane;
        var temperature = Equation.Temperature;
        var most = Highest(phi);

        var low = most + temperature * Math.Log(TailShare);
        var bound = LargestBend * temperature;
        var s = plane.Stride;
        for (var sweep = 0; sweep < sweeps; sweep++)
        {
            plane.FillGhosts(phi);
            var count = 0;
            for (var j = 0; j < plane.Ny; j++)
            {
                var row = plane.Row(j);
                for (var i = row; i < row + plane.Nx; i++)
                {
                    var acrossX = phi[i - 1] + phi[i + 1];
                    var acrossY = phi[i - s] + phi[i + s];
                    var twice = 2 * phi[i];
                    if (phi[i] - Equation.CellPotential[i] > low || (Math.Abs(acrossX - twice) <= bound && Math.Abs(acrossY - twice) <= bound))
                    {
                        right[i] = phi[i];
                        continue;
                    }

                    count++;
                    right[i] = 0.25 * twice + 0.125 * (acrossX + acrossY);
                }
            }

            if (count == 0)
                return;
            for (var j = 0; j < plane.Ny; j++)
                right.AsSpan(plane.Row(j), plane.Nx).CopyTo(phi.AsSpan(plane.Row(j)));
        }
    }

    // No cell of the tails may move by more than T in a step: what goes wild there must not stop the rest.
    private void LimitInTails(double[] phi)
    {
        var plane = Equation.Plane;
        var low = Highest(phi) + Equation.Temperature * Math.Log(TailShare);
        var most = Equation.Temperature;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
            {
                if (phi[i] - Equation.CellPotential[i] < low)
                    correction[i] = Math.Clamp(correction[i], -most, most);
            }
        }
    }

    // Largest φ − V over the cells: T times the log of the largest density.
    private double Highest(double[] phi)
    {
        var plane = Equation.Plane;
        var most = double.NegativeInfinity;
        for (var j = 0; j < plane.Ny; j++)
        {
            var row = plane.Row(j);
            for (var i = row; i < row + plane.Nx; i++)
                most = Math.Max(most, phi[i] - Equation.CellPotential[i]);
        }

        return most;
    }

    private int SolveLinear(double forcing, double weightFloor)
    {
        preconditioner.Prepare(Equation.DiffusionX, Equation.DriftX, Equation.DiffusionY, Equation.DriftY, Equation.TypicalDiffusion);
        FloorWeights(weightFloor);
        Array.Copy(Equation.Residual, right, right.Length);
        return krylov.Solve(right, correction, Equation.Weights, apply, precondition, forcing, MostProducts).Products;
    }

    /// <summary>Sets where the linearised step stands in: where its density is below this share of its maximum.</summary>
    public void SetTail(double tailDensity)
    {
        var plane = Equation.Plane;
        var most = Highest(Equation.Linear);

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
