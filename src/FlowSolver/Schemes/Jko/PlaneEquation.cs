using System.Runtime.Intrinsics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Jko;

/// <summary>How far a chemical potential is from solving the equation of a step.</summary>
/// <param name="Weighted">∫ρ|G|, the L1 norm of the residual of log ρ.</param>
/// <param name="Square">∫ρ G².</param>
/// <param name="Mass">∫ρ′ of the density that the map carries to the old one; 1 up to O(h²) at the solution.</param>
/// <param name="Folded">Cells where the map is not (safely) orientation preserving.</param>
internal readonly record struct PlaneResidual(double Weighted, double Square, double Mass, int Folded);

/// <summary>
/// The Eulerian equation of a JKO step in the plane, G(φ) = (φ − V)/T − log ρₙ(Y) − log det(I + τD²φ) = 0 with Y = y + τ∇φ the map back to the
/// old density, on one grid, with its derivative.
/// </summary>
/// <remarks>
/// φ = V + T log ρₙ₊₁ is even across walls. Derivatives are central differences of second order; log ρₙ(Y) = (φₙ(Y) − V(Y))/T with φₙ read from a
/// bicubic spline and V from its formula, so that a constant φₙ is a solution to rounding and Gaussians are solved without grid error.
/// An eigenvalue of I + τD²φ below a small bound enters log det through the tangent of the logarithm there: the equation then makes sense for
/// any φ and stays concave in D²φ, for which undamped Newton steps come back from the far side by themselves. At a solution with mass the bound
/// is not active (<see cref="PlaneResidual.Folded"/> counts the cells where it is).
/// Source: J.-D. Benamou, G. Carlier, Q. Mérigot, É. Oudet, Numer. Math. 134 (2016) 611-636 (Monge-Ampère form of a JKO step).
/// </remarks>
internal sealed class PlaneEquation
{
    /// <summary>Least eigenvalue of I + τD²φ that enters the logarithm itself.</summary>
    private const double LeastStretch = 1e-3;

    // log ρ between which the bound rises to a share of what the eigenvalues are where the mass is.
    private const double TailFrom = -12;
    private const double TailTo = -22;
    private const double TailShare = 0.5;
    private const int RowsPerBlock = 8;
    private const int RowBuffers = 9;
    private readonly Potential potential;
    private readonly WorkerTeam team;
    private readonly int blocks;
    private readonly double[] buffers;
    private readonly double[] sums;
    private readonly double[] centersX;
    private readonly double[] centersY;
    private readonly Action<int> evaluateBlock;
    private readonly Action<int> applyBlock;
    private double[] phi = [];
    private double[] input = [];
    private double[] output = [];
    private bool withDerivative;

    public PlaneEquation(Potential potential, double temperature, Grid grid, WorkerTeam team)
    {
        this.potential = potential;
        this.team = team;
        Temperature = temperature;
        Grid = grid;
        Plane = new PaddedPlane(grid.Nx, grid.Ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic);
        CellPotential = Plane.NewField();
        Plane.Load(grid.Sample(potential.Value), CellPotential);
        Previous = new PlaneSpline(grid, Plane, team);
        Residual = Plane.NewField();
        Weights = Plane.NewField();
        DriftX = Plane.NewField();
        DriftY = Plane.NewField();
        DiffusionX = Plane.NewField();
        DiffusionY = Plane.NewField();
        Mixed = Plane.NewField();
        Linear = Plane.NewField();
        Trust = Plane.NewField();
        blocks = (grid.Ny + RowsPerBlock - 1) / RowsPerBlock;
        BufferLength = (grid.Nx + 7) / 8 * 8;
        buffers = new double[blocks * RowBuffers * BufferLength];
        sums = new double[blocks * 5];
        centersX = grid.X.Centers();
        centersY = grid.Y.Centers();
        evaluateBlock = EvaluateBlock;
        applyBlock = ApplyBlock;
    }

    public Grid Grid { get; }

    public PaddedPlane Plane { get; }

    public double Temperature { get; }

    /// <summary>τ, mobility included.</summary>
    public double Step { get; set; }

    /// <summary>V at the centres.</summary>
    public double[] CellPotential { get; }

    /// <summary>The spline through φₙ, normalised so that e^((φₙ − V)/T) has mass 1.</summary>
    public PlaneSpline Previous { get; set; }

    /// <summary>T·G at the last evaluation.</summary>
    public double[] Residual { get; }

    /// <summary>Weights of the norm in which linear systems are solved; 0 outside the grid.</summary>
    public double[] Weights { get; }

    public double[] DriftX { get; }

    public double[] DriftY { get; }

    public double[] DiffusionX { get; }

    public double[] DiffusionY { get; }

    public double[] Mixed { get; }

    /// <summary>The solution of the equation linearised about φ = 0, which stands in where there is next to no mass.</summary>
    public double[] Linear { get; }

    /// <summary>Share of the equation itself in each cell; the rest is φ = <see cref="Linear"/>.</summary>
    public double[] Trust { get; }

    /// <summary>Whether to evaluate the equation without the stand-in and with the norm of the old density.</summary>
    public bool Bare { get; set; }

    /// <summary>A representative diffusion of the linearised operator: its mean weighted by the density.</summary>
    public double TypicalDiffusion { get; private set; }

    private double TailStretch { get; set; } = TailShare;

    private int BufferLength { get; }

    /// <summary>Evaluates the residual at φ, and the derivative when asked. Fills the ghosts of φ.</summary>
    public PlaneResidual Evaluate(double[] phi, bool withDerivative)
    {
        this.phi = phi;
        this.withDerivative = withDerivative;
        Plane.FillGhosts(phi);
        team.Run(blocks, evaluateBlock);
        double weighted = 0, square = 0, mass = 0, folded = 0, diffusion = 0;
        for (var b = 0; b < blocks; b++)
        {
            weighted += sums[5 * b];
            square += sums[5 * b + 1];
            mass += sums[5 * b + 2];
            folded += sums[5 * b + 3];
            diffusion += sums[5 * b + 4];
        }

        if (withDerivative)
        {
            TypicalDiffusion = mass > 0 ? diffusion / mass : 0;
            var free = 0.5 * Temperature * Step * (1 / (Grid.X.Width * Grid.X.Width) + 1 / (Grid.Y!.Width * Grid.Y.Width));
            TailStretch = Math.Clamp(TailShare * free / TypicalDiffusion, LeastStretch, TailShare);
        }

        var volume = Grid.CellVolume;
        return new PlaneResidual(weighted * volume, square * volume, mass * volume, (int)folded);
    }

    /// <summary>Writes T times the derivative of G at the last φ, applied to a field. Fills the ghosts of the field.</summary>
    public void ApplyDerivative(double[] field, double[] target)
    {
        Plane.FillGhosts(field);
        input = field;
        output = target;
        team.Run(blocks, applyBlock);
    }

    private void EvaluateBlock(int block)
    {
        var n = Grid.Nx;
        var room = buffers.AsSpan(block * RowBuffers * BufferLength, RowBuffers * BufferLength);
        var mapX = room[..n];
        var mapY = room.Slice(BufferLength, n);
        var old = room.Slice(2 * BufferLength, n);
        var oldX = room.Slice(3 * BufferLength, n);
        var oldY = room.Slice(4 * BufferLength, n);
        var value = room.Slice(5 * BufferLength, n);
        var valueX = room.Slice(6 * BufferLength, n);
        var valueY = room.Slice(7 * BufferLength, n);
        var stretch = room.Slice(8 * BufferLength, n);
        var tau = Step;
        var temperature = Temperature;
        var inverseT = 1 / temperature;
        var (hx, hy) = (Grid.X.Width, Grid.Y!.Width);
        var (gx, gy) = (0.5 / hx, 0.5 / hy);
        var (cxx, cxy, cyy) = (tau / (hx * hx), tau / (4 * hx * hy), tau / (hy * hy));
        var stride = Plane.Stride;
        double weighted = 0, square = 0, mass = 0, diffusion = 0;
        var folded = 0;
        for (var j = block * RowsPerBlock; j < Math.Min(Grid.Ny, (block + 1) * RowsPerBlock); j++)
        {
            var row = Plane.Row(j);
            var below = phi.AsSpan(row - stride - 1, n + 2);
            var here = phi.AsSpan(row - 1, n + 2);
            var above = phi.AsSpan(row + stride - 1, n + 2);
            var potentialRow = CellPotential.AsSpan(row, n);
            var residual = Residual.AsSpan(row, n);
            var center = centersY[j];
            for (var i = 0; i < n; i++)
            {
                mapX[i] = centersX[i] + tau * ((here[i + 2] - here[i]) * gx);
                mapY[i] = center + tau * ((above[i + 1] - below[i + 1]) * gy);
            }

            MoveInside(Grid.X, mapX);
            MoveInside(Grid.Y, mapY);
            Previous.Evaluate(mapX, mapY, old, oldX, oldY);
            if (withDerivative)
            {
                potential.Value(mapX, mapY, value);
                potential.Gradient(mapX, mapY, valueX, valueY);
            }
            else
            {
                potential.Value(mapX, mapY, value);
            }

            for (var i = 0; i < n; i++)
            {
                var twice = 2 * here[i + 1];
                var xx = 1 + cxx * (here[i] - twice + here[i + 2]);
                var yy = 1 + cyy * (below[i + 1] - twice + above[i + 1]);
                var xy = cxy * (above[i + 2] - above[i] - below[i + 2] + below[i]);
                var determinant = xx * yy - xy * xy;
                stretch[i] = determinant;
                var bound = LeastStretch;
                if (!(determinant > TailStretch * (xx + yy - TailStretch)) || !(xx + yy > 2 * TailStretch))
                    bound = StretchBound((here[i + 1] - potentialRow[i]) * inverseT);
                if (!(determinant > bound * (xx + yy - bound)) || !(xx + yy > 2 * bound))
                {
                    // λ₋ < bound: (λ₊ − bound)(λ₋ − bound) < 0 or both below.
                    folded++;
                    stretch[i] = 1;
                    var (logarithm, ixx, ixy, iyy) = Extended(xx, xy, yy, bound);
                    old[i] += logarithm * temperature;
                    if (withDerivative)
                        SetDiffusion(row + i, ixx, ixy, iyy, cxx, cxy, cyy);
                    continue;
                }

                if (withDerivative)
                {
                    var inverse = 1 / determinant;
                    SetDiffusion(row + i, yy * inverse, -xy * inverse, xx * inverse, cxx, cxy, cyy);
                }
            }

            VectorMath.Log(stretch, stretch);
            var trust = Trust.AsSpan(row, n);
            var linear = Linear.AsSpan(row, n);
            for (var i = 0; i < n; i++)
            {
                // Grouped so that equal values cancel before anything is added: nothing is left at equilibrium.
                var bend = temperature * stretch[i];
                var full = here[i + 1] - old[i] + (value[i] - potentialRow[i]) - bend;
                residual[i] = Bare ? full : trust[i] * full + (1 - trust[i]) * (here[i + 1] - linear[i]);
                old[i] = (Bare ? old[i] - value[i] + bend : here[i + 1] - potentialRow[i]) * inverseT;
            }

            VectorMath.Exp(old, old);
            var weights = Weights.AsSpan(row, n);
            var diffusionX = DiffusionX.AsSpan(row, n);
            var diffusionY = DiffusionY.AsSpan(row, n);
            for (var i = 0; i < n; i++)
            {
                var rho = old[i];
                var g = residual[i] * inverseT;
                weighted += rho * Math.Abs(g);
                square += rho * g * g;
                mass += rho;
            }

            if (!withDerivative)
                continue;
            var driftX = DriftX.AsSpan(row, n);
            var driftY = DriftY.AsSpan(row, n);
            var mixed = Mixed.AsSpan(row, n);
            for (var i = 0; i < n; i++)
            {
                var share = Bare ? 1 : trust[i];
                diffusion += old[i] * 0.5 * (diffusionX[i] + diffusionY[i]);
                weights[i] = old[i];
                // A point held back at a wall does not move with φ.
                driftX[i] = OnWall(Grid.X, mapX[i]) ? 0 : share * tau * gx * (oldX[i] - valueX[i]);
                driftY[i] = OnWall(Grid.Y, mapY[i]) ? 0 : share * tau * gy * (oldY[i] - valueY[i]);
                diffusionX[i] *= share;
                diffusionY[i] *= share;
                mixed[i] *= share;
                if (!Bare)
                    continue;
                // The stand-in must not oscillate where ρₙ falls by more than e² from cell to cell.
                diffusionX[i] = Math.Max(diffusionX[i], Math.Abs(driftX[i]));
                diffusionY[i] = Math.Max(diffusionY[i], Math.Abs(driftY[i]));
            }
        }

        sums[5 * block] = weighted;
        sums[5 * block + 1] = square;
        sums[5 * block + 2] = mass;
        sums[5 * block + 3] = folded;
        sums[5 * block + 4] = diffusion;
    }

    private void SetDiffusion(int index, double ixx, double ixy, double iyy, double cxx, double cxy, double cyy)
    {
        DiffusionX[index] = Temperature * cxx * ixx;
        DiffusionY[index] = Temperature * cyy * iyy;
        Mixed[index] = 2 * Temperature * cxy * ixy;
    }

    // log det and its derivative (the inverse) with the logarithm continued by its tangent below the bound, by eigenvalues.
    private static (double Logarithm, double Xx, double Xy, double Yy) Extended(double xx, double xy, double yy, double bound)
    {
        var mean = 0.5 * (xx + yy);
        var half = 0.5 * (xx - yy);
        var radius = Math.Sqrt(half * half + xy * xy);
        var (high, low) = (mean + radius, mean - radius);
        var (logHigh, slopeHigh) = Logarithm(high);
        var (logLow, slopeLow) = Logarithm(low);
        var (c, s) = radius > 0 ? (half / radius, xy / radius) : (1, 0);
        var average = 0.5 * (slopeHigh + slopeLow);
        var spread = 0.5 * (slopeHigh - slopeLow);
        return (logHigh + logLow, average + spread * c, spread * s, average - spread * c);

        (double, double) Logarithm(double stretch) => stretch >= bound
            ? (Math.Log(stretch), 1 / stretch)
            : (Math.Log(bound) + (stretch / bound - 1), 1 / bound);
    }

    // The bound rises from LeastStretch where there is mass to TailStretch where there is none.
    private double StretchBound(double logDensity)
    {
        var depth = (TailFrom - logDensity) / (TailFrom - TailTo);
        return LeastStretch * Math.Pow(TailStretch / LeastStretch, Math.Clamp(depth, 0, 1));
    }

    private static void MoveInside(Axis axis, Span<double> positions)
    {
        var (from, to) = (axis.Interval.From, axis.Interval.To);
        for (var i = 0; i < positions.Length; i++)
        {
            if (!(positions[i] >= from && positions[i] <= to))
                positions[i] = axis.IsPeriodic ? axis.Interval.Fold(positions[i]) : Math.Clamp(positions[i], from, to);
        }
    }

    private static bool OnWall(Axis axis, double position)
        => !axis.IsPeriodic && (position == axis.Interval.From || position == axis.Interval.To);

    private void ApplyBlock(int block)
    {
        var n = Grid.Nx;
        var stride = Plane.Stride;
        for (var j = block * RowsPerBlock; j < Math.Min(Grid.Ny, (block + 1) * RowsPerBlock); j++)
        {
            var row = Plane.Row(j);
            ref var u = ref input[row];
            ref var w = ref output[row];
            ref var driftX = ref DriftX[row];
            ref var driftY = ref DriftY[row];
            ref var diffusionX = ref DiffusionX[row];
            ref var diffusionY = ref DiffusionY[row];
            ref var mixed = ref Mixed[row];
            // Whole vectors: what falls into the margin at the end of a row has coefficients 0 and weight 0.
            for (var i = 0; i < n; i += 8)
            {
                var here = At(ref u, i);
                var (east, west) = (At(ref u, i + 1), At(ref u, i - 1));
                var (north, south) = (At(ref u, i + stride), At(ref u, i - stride));
                var twice = here + here;
                var sum = At(ref driftX, i) * (east - west) + At(ref driftY, i) * (north - south)
                    + At(ref diffusionX, i) * (east - twice + west) + At(ref diffusionY, i) * (north - twice + south)
                    + At(ref mixed, i) * (At(ref u, i + stride + 1) - At(ref u, i + stride - 1) - At(ref u, i - stride + 1) + At(ref u, i - stride - 1));
                (here - sum).StoreUnsafe(ref w, (nuint)i);
            }
        }

        static Vector512<double> At(ref double origin, int offset)
            => Vector512.LoadUnsafe(ref System.Runtime.CompilerServices.Unsafe.Add(ref origin, offset));
    }
}
