using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.Jko;

/// <summary>
/// A JKO step as the convex problem it is, on a coarse grid: the start for hard cases.
/// </summary>
/// <remarks>
/// The map S(x) = x + ∇θ(x) from the old density minimises E(θ) = ∫w [|∇θ|²/(2τ) + V(x + ∇θ) − T log det(I + D²θ)] with w = ρₙ plus a little everywhere.
/// Convex where V is (and near enough where τ is short against its concavity; elsewhere the Hessian's negative part is left out); −log det is a
/// barrier, so that the map never folds. Newton's method with backtracking from the identity, its linear systems by banded Cholesky: the Hessian
/// carries the whole contrast of the density, which plain preconditioners do not bear. The potential of the step is then
/// φ(y) = −min over x of (|x − y|²/2 + θ(x))/τ, convex enough by construction.
/// Source: J.-D. Benamou, G. Carlier, Q. Mérigot, É. Oudet, Numer. Math. 134 (2016) 611-636.
/// </remarks>
internal sealed class PlanePrimal
{
    private const double LeastWeight = 1e-9;
    private const int MostSteps = 60;
    private readonly Potential potential;
    private readonly double temperature;
    private readonly Grid grid;
    private readonly PaddedPlane plane;
    private readonly BandedCholesky hessian;
    private readonly int[] order;
    private readonly double[] weights;
    private readonly double[] theta;
    private readonly double[] trial;
    private readonly double[] gradient;
    private readonly double[] x;
    private readonly double[] y;
    private readonly double[] value;
    private readonly double[] slopeX;
    private readonly double[] slopeY;
    private readonly double[] bendXX;
    private readonly double[] bendXY;
    private readonly double[] bendYY;

    public PlanePrimal(Potential potential, double temperature, Grid grid)
    {
        this.potential = potential;
        this.temperature = temperature;
        this.grid = grid;
        plane = new PaddedPlane(grid.Nx, grid.Ny, grid.X.IsPeriodic, grid.Y!.IsPeriodic);
        var count = grid.CellCount;
        order = new int[count];
        for (var j = 0; j < grid.Ny; j++)
        {
            // On a circle rows are taken from both ends in turn, so that neighbours stay close.
            var place = !plane.WrapsY ? j : j < (grid.Ny + 1) / 2 ? 2 * j : 2 * (grid.Ny - 1 - j) + 1;
            for (var i = 0; i < grid.Nx; i++)
                order[j * grid.Nx + i] = place * grid.Nx + i;
        }

        var rows = plane.WrapsY ? 4 : 2;
        hessian = new BandedCholesky(count, Math.Min(count - 1, rows * grid.Nx + (plane.WrapsX ? grid.Nx - 1 : 2)));
        weights = new double[count];
        theta = plane.NewField();
        trial = plane.NewField();
        gradient = new double[count];
        (x, y, value) = (new double[count], new double[count], new double[count]);
        (slopeX, slopeY) = (new double[count], new double[count]);
        (bendXX, bendXY, bendYY) = (new double[count], new double[count], new double[count]);
    }

    public Grid Grid => grid;

    /// <summary>Solves the step and writes θ, flat.</summary>
    /// <param name="density">ρₙ on this grid, flat, mass 1.</param>
    /// <param name="tau">τ, mobility included.</param>
    /// <param name="map">Receives θ at the centres.</param>
    /// <returns>Newton steps taken.</returns>
    public int Solve(ReadOnlySpan<double> density, double tau, double[] map)
    {
        var most = 0.0;
        foreach (var rho in density)
            most = Math.Max(most, rho);
        for (var i = 0; i < weights.Length; i++)
            weights[i] = density[i] / most + LeastWeight;
        Array.Clear(theta);
        var energy = Energy(theta, tau);
        var steps = 0;
        for (; steps < MostSteps; steps++)
        {
            var decrement = NewtonDirection(tau);
            if (!double.IsFinite(decrement))
                break;
            var taken = 1.0;
            var next = double.NaN;
            for (var half = 0; half < 40; half++, taken *= 0.5)
            {
                for (var j = 0; j < grid.Ny; j++)
                {
                    var row = plane.Row(j);
                    for (var i = 0; i < grid.Nx; i++)
                        trial[row + i] = theta[row + i] - taken * gradient[order[j * grid.Nx + i]];
                }

                next = Energy(trial, tau);
                if (next <= energy - 1e-4 * taken * decrement)
                    break;
            }

            if (!(next <= energy))
                break;
            Array.Copy(trial, theta, theta.Length);
            var fall = energy - next;
            energy = next;
            if (taken == 1 && decrement <= 1e-10 * Math.Abs(fall + energy))
                break;
        }

        for (var j = 0; j < grid.Ny; j++)
            theta.AsSpan(plane.Row(j), grid.Nx).CopyTo(map.AsSpan(j * grid.Nx));
        return steps;
    }

    // E, infinite where the map folds or leaves the domain.
    private double Energy(double[] field, double tau)
    {
        plane.FillGhosts(field);
        var (hx, hy) = (grid.X.Width, grid.Y!.Width);
        var sum = 0.0;
        for (var j = 0; j < grid.Ny; j++)
        {
            for (var i = 0; i < grid.Nx; i++)
            {
                var (gx, gy, xx, xy, yy) = Differences(field, plane.Row(j) + i, hx, hy);
                var determinant = xx * yy - xy * xy;
                if (!(determinant > 0 && xx > 0))
                    return double.PositiveInfinity;
                var cell = j * grid.Nx + i;
                (x[cell], y[cell]) = (grid.X.Center(i) + gx, grid.Y.Center(j) + gy);
                if ((!plane.WrapsX && !grid.X.Interval.Contains(x[cell])) || (!plane.WrapsY && !grid.Y.Interval.Contains(y[cell])))
                    return double.PositiveInfinity;
                (x[cell], y[cell]) = (grid.X.Interval.Fold(x[cell]), grid.Y.Interval.Fold(y[cell]));
                sum += weights[cell] * ((gx * gx + gy * gy) / (2 * tau) - temperature * Math.Log(determinant));
            }
        }

        potential.Value(x, y, value);
        for (var i = 0; i < value.Length; i++)
            sum += weights[i] * value[i];
        return sum;
    }

    private (double Gx, double Gy, double Xx, double Xy, double Yy) Differences(double[] field, int at, double hx, double hy)
    {
        var s = plane.Stride;
        var twice = 2 * field[at];
        return ((field[at + 1] - field[at - 1]) / (2 * hx), (field[at + s] - field[at - s]) / (2 * hy),
            1 + (field[at + 1] - twice + field[at - 1]) / (hx * hx),
            (field[at + s + 1] - field[at + s - 1] - field[at - s + 1] + field[at - s - 1]) / (4 * hx * hy),
            1 + (field[at + s] - twice + field[at - s]) / (hy * hy));
    }

    // Leaves the Newton direction in the gradient, in the order of the unknowns; returns gᵀH⁻¹g.
    private double NewtonDirection(double tau)
    {
        var (hx, hy) = (grid.X.Width, grid.Y!.Width);
        Energy(theta, tau);
        potential.Jet(x, y, new PotentialJet
        {
            Value = value,
            GradientX = slopeX,
            GradientY = slopeY,
            HessianXX = bendXX,
            HessianXY = bendXY,
            HessianYY = bendYY,
        });
        hessian.Clear();
        Array.Clear(gradient);
        Span<int> index = stackalloc int[9];
        Span<double> dgx = stackalloc double[9];
        Span<double> dgy = stackalloc double[9];
        Span<double> dxx = stackalloc double[9];
        Span<double> dxy = stackalloc double[9];
        Span<double> dyy = stackalloc double[9];
        (dgx[3], dgx[5]) = (-0.5 / hx, 0.5 / hx);
        (dgy[1], dgy[7]) = (-0.5 / hy, 0.5 / hy);
        (dxx[3], dxx[4], dxx[5]) = (1 / (hx * hx), -2 / (hx * hx), 1 / (hx * hx));
        (dyy[1], dyy[4], dyy[7]) = (1 / (hy * hy), -2 / (hy * hy), 1 / (hy * hy));
        (dxy[0], dxy[2], dxy[6], dxy[8]) = (0.25 / (hx * hy), -0.25 / (hx * hy), -0.25 / (hx * hy), 0.25 / (hx * hy));
        for (var j = 0; j < grid.Ny; j++)
        {
            for (var i = 0; i < grid.Nx; i++)
            {
                for (var k = 0; k < 9; k++)
                    index[k] = order[Mirror(j + k / 3 - 1, grid.Ny, plane.WrapsY) * grid.Nx + Mirror(i + k % 3 - 1, grid.Nx, plane.WrapsX)];
                var cell = j * grid.Nx + i;
                var w = weights[cell];
                var (gx, gy, xx, xy, yy) = Differences(theta, plane.Row(j) + i, hx, hy);
                var inverse = 1 / (xx * yy - xy * xy);
                var (bxx, bxy, byy) = (yy * inverse, -xy * inverse, xx * inverse);
                // First derivative of E by (gx, gy, xx, xy, yy).
                var (ex, ey) = (w * (gx / tau + slopeX[cell]), w * (gy / tau + slopeY[cell]));
                var (exx, exy, eyy) = (-w * temperature * bxx, -2 * w * temperature * bxy, -w * temperature * byy);
                var (cxx, cxy, cyy) = Positive(1 / tau + bendXX[cell], bendXY[cell], 1 / tau + bendYY[cell]);
                for (var a = 0; a < 9; a++)
                {
                    gradient[index[a]] += ex * dgx[a] + ey * dgy[a] + exx * dxx[a] + exy * dxy[a] + eyy * dyy[a];
                    // Row a of w·(Gᵀ C G) + w T tr(B D B D).
                    var (ga, ha) = (cxx * dgx[a] + cxy * dgy[a], cxy * dgx[a] + cyy * dgy[a]);
                    var (p, q, r, s) = (bxx * dxx[a] + bxy * dxy[a], bxx * dxy[a] + bxy * dyy[a], bxy * dxx[a] + byy * dxy[a], bxy * dxy[a] + byy * dyy[a]);
                    var (mxx, mxy, myy) = (p * bxx + q * bxy, p * bxy + q * byy + r * bxx + s * bxy, r * bxy + s * byy);
                    for (var b = 0; b <= a; b++)
                    {
                        var entry = ga * dgx[b] + ha * dgy[b] + temperature * (mxx * dxx[b] + mxy * dxy[b] + myy * dyy[b]);
                        // Mirror images may fold two entries of a patch onto one pair: then both halves count.
                        if (entry != 0)
                            hessian.Add(index[a], index[b], w * (a != b && index[a] == index[b] ? 2 * entry : entry));
                    }
                }
            }
        }

        // A constant in θ changes nothing: one cell is held softly.
        hessian.LiftDiagonal(1e-11);
        Span<double> right = gradient;
        var before = (double[])gradient.Clone();
        if (!hessian.Factor())
            return double.NaN;
        hessian.Solve(right);
        var decrement = 0.0;
        for (var k = 0; k < before.Length; k++)
            decrement += before[k] * gradient[k];
        return decrement;
    }

    private static int Mirror(int index, int count, bool wraps)
        => (uint)index < (uint)count ? index : wraps ? (index + count) % count : index < 0 ? -1 - index : 2 * count - 1 - index;

    // The part of a symmetric matrix with eigenvalues above a thousandth of its largest one.
    private static (double Xx, double Xy, double Yy) Positive(double xx, double xy, double yy)
    {
        var mean = 0.5 * (xx + yy);
        var half = 0.5 * (xx - yy);
        var radius = Math.Sqrt(half * half + xy * xy);
        if (mean - radius > 0)
            return (xx, xy, yy);
        var high = Math.Max(Math.Abs(mean + radius), Math.Abs(mean - radius));
        var (top, low) = (Math.Max(mean + radius, 1e-3 * high), 1e-3 * high);
        var (c, s) = radius > 0 ? (half / radius, xy / radius) : (1, 0);
        var (average, spread) = (0.5 * (top + low), 0.5 * (top - low));
        return (average + spread * c, spread * s, average - spread * c);
    }
}
