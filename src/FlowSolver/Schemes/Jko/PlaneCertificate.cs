using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Schemes.Jko;

/// <summary>What a step is proved to be.</summary>
/// <param name="Gap">Primal minus dual value, in units of energy; the step's objective is within this of the minimum, up to quadrature.</param>
/// <param name="Transport">W2²/(2τ), in units of energy.</param>
/// <param name="Distance">W2 between the densities before and after, in units of length.</param>
/// <param name="Mass">Mass that the map carries back to the old density, by the new side's sum; 1 up to quadrature.</param>
internal readonly record struct PlaneProof(double Gap, double Transport, double Distance, double Mass)
{
    /// <summary>Gap relative to the transport cost. A cost below 10⁻¹² T is rounding and counts as that.</summary>
    public double RelativeGap(double temperature) => Gap / (Transport + 1e-12 * temperature);
}

/// <summary>
/// Certifies a step by the duality gap of min over ρ of W2²(ρ, ρₙ)/(2τ) + F(ρ).
/// </summary>
/// <remarks>
/// <para>Dual, on the old density's side: D = ∫ρₙ φᶜ − T log ∫e^((φ−V)/T) with φᶜ(x) = min over y of |x − y|²/(2τ) + φ(y), a lower bound for any φ.
/// The minimum is really taken: over all centres by lower envelopes, then by Newton's method on the bicubic spline of φ from the best centre.</para>
/// <para>Primal, on the new side: the density ρ′(y) = ρₙ(Y(y)) det(I + τD²φ(y)), with Y = y + τ∇φ and derivatives of the same spline, is by
/// construction carried to ρₙ by Y; its cost is that of this map, ∫|Y − y|² ρ′/(2τ) + F(ρ′). It shares neither points nor quadrature with the
/// dual, nor the difference formulas with the equation that was solved.</para>
/// <para>Both are formed from differences that vanish with the step, P − D = T·KL(ρ′|e^((φ−V)/T)) + ∫ρ′(|Y−y|²/(2τ) + φ) − ∫ρₙφᶜ, so that the gap
/// keeps its digits near equilibrium. What remains in it beside the true gap is the quadrature and interpolation error of the grid.</para>
/// Source: Kantorovich duality (F. Santambrogio, Optimal Transport for Applied Mathematicians, 2015, ch. 1 and 8).
/// </remarks>
internal sealed class PlaneCertificate
{
    private const int RowsPerBlock = 8;
    private const int RowBuffers = 8;
    private const int NewtonSteps = 12;

    // Log of pushed over predicted density above which a cell is asked whether the map is folded there.
    private const double Suspicious = 0.1;

    // Relative gap below which no second primal is asked for.
    private const double Small = 1e-6;
    private readonly Potential potential;
    private readonly PlaneEquation equation;
    private readonly WorkerTeam team;
    private readonly CTransform envelope;
    private readonly double[] flat;
    private readonly double[] transform;
    private readonly int[] minimisers;
    private readonly double[] buffers;
    private readonly double[] sums;
    private readonly double[] centersX;
    private readonly double[] centersY;
    private readonly int blocks;
    private readonly Action<int> dualBlock;
    private readonly Action<int> primalBlock;
    private readonly Action<int> mappedBlock;
    private readonly double[] weightsX;
    private readonly double[] weightsY;
    private readonly double[] moveX;
    private readonly double[] moveY;
    private double[] phi = [];
    private double[] old = [];
    private double leastWeight;
    private double dual;
    private PlaneSpline spline;

    public PlaneCertificate(Potential potential, PlaneEquation equation, PlaneSpline spline, WorkerTeam team)
    {
        this.potential = potential;
        this.equation = equation;
        this.spline = spline;
        this.team = team;
        var grid = equation.Grid;
        envelope = new CTransform(grid, 1, team);
        flat = new double[grid.CellCount];
        transform = new double[grid.CellCount];
        minimisers = new int[grid.CellCount];
        blocks = (grid.Ny + RowsPerBlock - 1) / RowsPerBlock;
        buffers = new double[blocks * RowBuffers * grid.Nx];
        sums = new double[blocks * 5];
        centersX = grid.X.Centers();
        centersY = grid.Y!.Centers();
        dualBlock = DualBlock;
        primalBlock = PrimalBlock;
        mappedBlock = MappedBlock;
        weightsX = QuadratureWeights(grid.X);
        weightsY = QuadratureWeights(grid.Y);
        moveX = equation.Plane.NewField();
        moveY = equation.Plane.NewField();
    }

    /// <summary>Certifies φ as the solution of the equation's step.</summary>
    /// <param name="phi">φ, normalised so that e^((φ−V)/T) has mass 1.</param>
    /// <param name="old">φₙ, likewise.</param>
    /// <param name="fitted">The spline through φ.</param>
    public PlaneProof Prove(double[] phi, double[] old, PlaneSpline fitted)
    {
        this.phi = phi;
        this.old = old;
        spline = fitted;
        var plane = equation.Plane;
        var volume = equation.Grid.CellVolume;
        plane.FillGhosts(phi);
        plane.Store(phi, flat);
        envelope.SetTime(equation.Step);
        envelope.Apply(flat, transform, minimisers);
        // Cells that hold less than 10⁻¹⁷ of the mass each cannot show in any sum.
        leastWeight = Math.Log(1e-17 / volume);
        team.Run(blocks, dualBlock);
        double value = 0, square = 0, oldMass = 0, newMass = 0;
        for (var b = 0; b < blocks; b++)
        {
            value += sums[5 * b];
            square += sums[5 * b + 1];
            oldMass += sums[5 * b + 2];
            newMass += sums[5 * b + 3];
        }

        // Both densities are normalised by one and the same quadrature.
        dual = value / oldMass;
        square /= oldMass;
        oldMass *= volume;
        newMass *= volume;
        team.Run(blocks, primalBlock);
        double mass = 0, entropy = 0, cost = 0;
        for (var b = 0; b < blocks; b++)
        {
            mass += sums[5 * b];
            entropy += sums[5 * b + 1];
            cost += sums[5 * b + 2];
        }

        mass *= volume;
        entropy *= volume;
        cost *= volume;
        // Σ(ρ′r − ρ′ + ρ), r = log ρ′/ρ, for the masses as they are, turned into KL of the normalised densities.
        var excess = mass - newMass;
        var relative = (entropy + excess) / mass - Math.Log(mass / newMass);
        var gap = equation.Temperature * relative + cost / mass;
        var transport = square / (2 * equation.Step);
        var proof = new PlaneProof(gap, transport, Math.Sqrt(square), mass / oldMass);
        if (Math.Abs(proof.RelativeGap(equation.Temperature)) <= Small)
            return proof;

        // The other feasible density: ρₙ pushed by the map at which the minima are taken. It needs ρₙ at the centres only and cannot fold.
        team.Run(blocks, mappedBlock);
        var pushed = 0.0;
        for (var b = 0; b < blocks; b++)
            pushed += sums[5 * b];
        var other = pushed * volume / oldMass + equation.Temperature * Math.Log(newMass / oldMass);
        return Math.Abs(other) < Math.Abs(gap) ? proof with { Gap = other } : proof;
    }

    // The midpoint rule with its ends corrected to fourth order at walls.
    private static double[] QuadratureWeights(Axis axis)
    {
        var weights = new double[axis.Cells];
        Array.Fill(weights, 1);
        if (axis.IsPeriodic || axis.Cells < 6)
            return weights;
        for (var k = 0; k < 3; k++)
        {
            var change = (k == 0 ? 2 : k == 1 ? -3 : 1) / 24.0;
            weights[k] += change;
            weights[^(k + 1)] += change;
        }

        return weights;
    }

    // ∫ρₙ φᶜ and ∫ρₙ |x − y|².
    private void DualBlock(int block)
    {
        var grid = equation.Grid;
        var plane = equation.Plane;
        var inverseT = 1 / equation.Temperature;
        var tau = equation.Step;
        double value = 0, square = 0, oldMass = 0, newMass = 0;
        for (var j = block * RowsPerBlock; j < Math.Min(grid.Ny, (block + 1) * RowsPerBlock); j++)
        {
            var row = plane.Row(j);
            for (var i = 0; i < grid.Nx; i++)
            {
                var exponent = (old[row + i] - equation.CellPotential[row + i]) * inverseT;
                var quadrature = weightsX[i] * weightsY[j];
                newMass += quadrature * Math.Exp((phi[row + i] - equation.CellPotential[row + i]) * inverseT);
                var weight = quadrature * Math.Exp(exponent);
                oldMass += weight;
                var (least, distance) = Minimum(centersX[i], centersY[j], minimisers[j * grid.Nx + i], tau, exponent < leastWeight, out moveX[row + i], out moveY[row + i]);
                transform[j * grid.Nx + i] = least;
                value += weight * least;
                square += weight * distance;
            }
        }

        sums[5 * block] = value;
        sums[5 * block + 1] = square;
        sums[5 * block + 2] = oldMass;
        sums[5 * block + 3] = newMass;
    }

    private (double Value, double Square) Minimum(double x, double y, int cell, double tau, bool roughly, out double moveX, out double moveY)
    {
        var grid = equation.Grid;
        var (row, column) = Math.DivRem(cell, grid.Nx);
        var px = centersX[column];
        var py = centersY[row];
        var half = 0.5 / tau;
        double bestValue = double.PositiveInfinity, bestSquare = 0;
        moveX = moveY = 0;
        for (var k = 0; k < NewtonSteps; k++)
        {
            var dx = Offset(grid.X, px - x);
            var dy = Offset(grid.Y!, py - y);
            var jet = spline.At(px, py);
            var square = dx * dx + dy * dy;
            var value = half * square + jet.Value;
            var better = value < bestValue;
            if (better)
                (bestValue, bestSquare, moveX, moveY) = (value, square, dx, dy);
            var gx = dx + tau * jet.GradientX;
            var gy = dy + tau * jet.GradientY;
            // Far below what the value can show: its error is the square of this.
            if (gx * gx + gy * gy <= 1e-18 * (square + 1e-12 * grid.CellVolume) || (!better && k > 1) || (roughly && k > 2))
                break;
            var xx = 1 + tau * jet.HessianXX;
            var yy = 1 + tau * jet.HessianYY;
            var xy = tau * jet.HessianXY;
            var determinant = xx * yy - xy * xy;
            if (!(determinant > 0 && xx > 0))
                break;
            var stepX = Math.Clamp((yy * gx - xy * gy) / determinant, -grid.X.Width, grid.X.Width);
            var stepY = Math.Clamp((xx * gy - xy * gx) / determinant, -grid.Y!.Width, grid.Y.Width);
            px = Inside(grid.X, px - stepX);
            py = Inside(grid.Y, py - stepY);
        }

        return (bestValue, bestSquare);
    }

    private static double Inside(Axis axis, double position)
        => axis.IsPeriodic ? position : Math.Clamp(position, axis.Interval.From, axis.Interval.To);

    private static double Offset(Axis axis, double difference)
        => axis.IsPeriodic ? difference - axis.Interval.Length * Math.Round(difference / axis.Interval.Length) : difference;

    // ∫ρₙ (V(S) − φ(S) + T log ρₙ − T log det DS), the gap of the density that S pushes ρₙ to: the transport costs are the same and drop out.
    private void MappedBlock(int block)
    {
        var grid = equation.Grid;
        var plane = equation.Plane;
        var n = grid.Nx;
        var room = buffers.AsSpan(block * RowBuffers * n, RowBuffers * n);
        var mapX = room[..n];
        var mapY = room.Slice(n, n);
        var value = room.Slice(2 * n, n);
        var inverseT = 1 / equation.Temperature;
        var half = 0.5 / equation.Step;
        var sum = 0.0;
        for (var j = block * RowsPerBlock; j < Math.Min(grid.Ny, (block + 1) * RowsPerBlock); j++)
        {
            var row = plane.Row(j);
            for (var i = 0; i < n; i++)
            {
                mapX[i] = grid.X.Interval.Fold(centersX[i] + moveX[row + i]);
                mapY[i] = grid.Y!.Interval.Fold(centersY[j] + moveY[row + i]);
            }

            potential.Value(mapX, mapY, value);
            for (var i = 0; i < n; i++)
            {
                var at = row + i;
                var level = (old[at] - equation.CellPotential[at]) * inverseT;
                if (level < leastWeight)
                    continue;
                var xx = 1 + Slope(moveX, at, 1, i, n, grid.X);
                var yx = Slope(moveY, at, 1, i, n, grid.X);
                var xy = Slope(moveX, at, plane.Stride, j, grid.Ny, grid.Y!);
                var yy = 1 + Slope(moveY, at, plane.Stride, j, grid.Ny, grid.Y!);
                // Differences across a tear may turn over; a stretch of 10⁻⁶ is the least that is read from them.
                var area = Math.Max(xx * yy - xy * yx, 1e-6);
                var moved = moveX[at] * moveX[at] + moveY[at] * moveY[at];
                var potentialThere = transform[j * n + i] - half * moved;
                sum += weightsX[i] * weightsY[j] * Math.Exp(level)
                    * (value[i] - potentialThere + equation.Temperature * (level - Math.Log(area)));
            }
        }

        sums[5 * block] = sum;
    }

    // First derivative along a line to fourth order inside, to second beside walls.
    private static double Slope(double[] field, int at, int stride, int index, int count, Axis axis)
    {
        if (axis.IsPeriodic)
        {
            double Value(int k) => field[at + ((index + k + count) % count - index) * stride];
            return (8 * (Value(1) - Value(-1)) - (Value(2) - Value(-2))) / (12 * axis.Width);
        }

        if (index >= 2 && index < count - 2)
            return (8 * (field[at + stride] - field[at - stride]) - (field[at + 2 * stride] - field[at - 2 * stride])) / (12 * axis.Width);
        if (index == 0)
            return (-3 * field[at] + 4 * field[at + stride] - field[at + 2 * stride]) / (2 * axis.Width);
        if (index == count - 1)
            return (3 * field[at] - 4 * field[at - stride] + field[at - 2 * stride]) / (2 * axis.Width);
        return (field[at + stride] - field[at - stride]) / (2 * axis.Width);
    }

    // Whether y is where the minimum for x = Y(y) is taken, up to what can be read between centres. Where φ is not convex enough (in strips
    // that the step empties) the map folds, and only this part of it carries mass.
    private bool IsContact(double x, double y, double value)
    {
        var grid = equation.Grid;
        var (axisX, axisY) = (grid.X, grid.Y!);
        var u = Math.Clamp((x - axisX.Interval.From) / axisX.Width - 0.5, 0, axisX.Cells - 1.001);
        var v = Math.Clamp((y - axisY.Interval.From) / axisY.Width - 0.5, 0, axisY.Cells - 1.001);
        var (i, j) = ((int)u, (int)v);
        var (s, t) = (u - i, v - j);
        var at = j * grid.Nx + i;
        var read = (1 - t) * ((1 - s) * transform[at] + s * transform[at + 1]) + t * ((1 - s) * transform[at + grid.Nx] + s * transform[at + grid.Nx + 1]);
        var slack = (axisX.Width * axisX.Width + axisY.Width * axisY.Width) / (4 * equation.Step);
        return value <= read + slack + 1e-3 * equation.Temperature;
    }

    // 12 h² times the second derivative, to fourth order.
    private static double Bend(double a, double b, double c, double d, double e) => 16 * (b + d) - (a + e) - 30 * c;

    // Mass of ρ′, Σ(ρ′ log(ρ′/ρ) − ρ′ + ρ), and ∫ρ′(|Y − y|²/(2τ) + φ − D).
    private void PrimalBlock(int block)
    {
        var grid = equation.Grid;
        var plane = equation.Plane;
        var n = grid.Nx;
        var room = buffers.AsSpan(block * RowBuffers * n, RowBuffers * n);
        var mapX = room[..n];
        var mapY = room.Slice(n, n);
        var before = room.Slice(2 * n, n);
        var unusedX = room.Slice(3 * n, n);
        var unusedY = room.Slice(4 * n, n);
        var value = room.Slice(5 * n, n);
        var determinant = room.Slice(6 * n, n);
        var cost = room.Slice(7 * n, n);
        var tau = equation.Step;
        var temperature = equation.Temperature;
        var inverseT = 1 / temperature;
        var stride = plane.Stride;
        var factorX = tau / (12 * grid.X.Width * grid.X.Width);
        var factorY = tau / (12 * grid.Y!.Width * grid.Y.Width);
        double mass = 0, entropy = 0, transport = 0;
        for (var j = block * RowsPerBlock; j < Math.Min(grid.Ny, (block + 1) * RowsPerBlock); j++)
        {
            var row = plane.Row(j);
            for (var i = 0; i < n; i++)
            {
                var jet = spline.At(centersX[i], centersY[j]);
                var (mx, my) = (tau * jet.GradientX, tau * jet.GradientY);
                var at = row + i;
                var bendX = Bend(phi[at - 2], phi[at - 1], phi[at], phi[at + 1], phi[at + 2]);
                var bendY = Bend(phi[at - 2 * stride], phi[at - stride], phi[at], phi[at + stride], phi[at + 2 * stride]);
                var (xx, yy, xy) = (1 + factorX * bendX, 1 + factorY * bendY, tau * jet.HessianXY);
                var area = xx * yy - xy * xy;
                determinant[i] = xx > 0 && area > 0 ? area : 0;
                cost[i] = 0.5 * (mx * mx + my * my) / tau;
                mapX[i] = grid.X.Interval.Fold(centersX[i] + mx);
                mapY[i] = grid.Y.Interval.Fold(centersY[j] + my);
            }

            equation.Previous.Evaluate(mapX, mapY, before, unusedX, unusedY);
            potential.Value(mapX, mapY, value);
            for (var i = 0; i < n; i++)
            {
                var rho = weightsX[i] * weightsY[j] * Math.Exp((phi[row + i] - equation.CellPotential[row + i]) * inverseT);
                if (!(determinant[i] > 0))
                {
                    entropy += rho;
                    continue;
                }

                var ratio = (before[i] - phi[row + i] + (equation.CellPotential[row + i] - value[i])) * inverseT + Math.Log(determinant[i]);
                if (ratio > Suspicious && !IsContact(mapX[i], mapY[i], cost[i] + phi[row + i]))
                {
                    entropy += rho;
                    continue;
                }

                var pushed = rho * Math.Exp(ratio);
                mass += pushed;
                entropy += Math.Abs(ratio) < 1e-3
                    ? rho * ratio * ratio * (0.5 + ratio * (1.0 / 3 + 0.125 * ratio))
                    : pushed > 0 ? pushed * ratio - pushed + rho : rho;
                transport += pushed * (cost[i] + phi[row + i] - dual);
            }
        }

        sums[5 * block] = mass;
        sums[5 * block + 1] = entropy;
        sums[5 * block + 2] = transport;
    }
}
