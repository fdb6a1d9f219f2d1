using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Studies;

/// <summary>One way from a well over a pass to another well, with its rate by the formula of Kramers and Eyring.</summary>
/// <param name="From">Index of the well that is left, among the wells.</param>
/// <param name="To">Index of the well that is reached.</param>
/// <param name="Pass">Index of the pass, among the passes.</param>
/// <param name="Barrier">V at the pass less V at the bottom of the well that is left, in units of energy.</param>
/// <param name="Rate">Rate, in 1/time.</param>
public sealed record KramersRow(int From, int To, int Pass, double Barrier, double Rate);

/// <summary>Wells, passes between them, and what the formula of Kramers and Eyring makes of them.</summary>
/// <param name="Wells">Bottoms of the wells.</param>
/// <param name="Passes">Passes.</param>
/// <param name="Rows">Rates from well to well, two a pass that joins two wells found.</param>
/// <param name="SlowRates">Rates of relaxation between the wells, increasing: one less than wells that are joined; empty with one well.</param>
public sealed record KramersResult(
    IReadOnlyList<CriticalPoint> Wells, IReadOnlyList<CriticalPoint> Passes, IReadOnlyList<KramersRow> Rows, IReadOnlyList<double> SlowRates);

/// <summary>Escape rates from the curvature of wells and passes.</summary>
/// <remarks>
/// k = M (|μ|/2π) √(det D²V(well)/|det D²V(pass)|) e^(−(V(pass) − V(well))/T) with μ the negative curvature at the pass (H. A. Kramers, Physica 7 (1940) 284;
/// H. Eyring, J. Chem. Phys. 3 (1935) 107; asymptotics proved by A. Bovier, M. Eckhoff, V. Gayrard, M. Klein, J. Eur. Math. Soc. 6 (2004) 399-424; from memory). At a
/// kink in one dimension the same integrals are taken with the two slopes, T(1/|V′₋| + 1/|V′₊|) in place of √(2πT/|V″|). Good to about a share T/barrier, and
/// meaningless for barriers of a few T. Which wells a pass joins follows from walking down from it on both sides. Relaxation rates between wells are
/// the eigenvalues of the jump process with these rates.
/// </remarks>
public static class KramersEstimate
{
    /// <summary>Finds the wells and passes of a problem's landscape and the rates between them.</summary>
    /// <param name="problem">The problem.</param>
    /// <param name="cells">Cells an axis on which wells and passes are looked for.</param>
    public static KramersResult Of(Problem problem, int cells = 512)
    {
        ArgumentNullException.ThrowIfNull(problem);
        var points = CriticalPoints.Find(problem.Potential, problem.Domain, cells);
        var wells = points.Where(point => point.Kind == CriticalKind.Minimum).ToList();
        var passes = points.Where(point => point.Kind == CriticalKind.Saddle).ToList();
        var rows = new List<KramersRow>();
        for (var pass = 0; pass < passes.Count; pass++)
        {
            var first = WalkDown(problem, passes[pass], -1, wells, cells);
            var second = WalkDown(problem, passes[pass], 1, wells, cells);
            // Both sides of a pass on a circle may lead to one and the same well: no exchange between wells then.
            if (first < 0 || second < 0 || first == second)
                continue;
            rows.Add(Row(problem, wells, first, second, passes[pass], pass));
            rows.Add(Row(problem, wells, second, first, passes[pass], pass));
        }

        return new KramersResult(wells, passes, rows, Relaxation(problem, wells, rows));
    }

    private static KramersRow Row(Problem problem, List<CriticalPoint> wells, int from, int to, CriticalPoint pass, int index)
    {
        var barrier = pass.Potential - wells[from].Potential;
        var temperature = problem.Temperature;
        var rate = problem.Mobility * Math.Exp(-barrier / temperature);
        if (problem.Dimension == 1)
            rate *= temperature / (Width(wells[from], temperature) * Width(pass, temperature));
        else
            rate *= -pass.LowCurvature / (2 * Math.PI) * Math.Sqrt(wells[from].LowCurvature * wells[from].HighCurvature / Math.Abs(pass.LowCurvature * pass.HighCurvature));
        return new KramersRow(from, to, index, barrier, rate);
    }

    // ∫e^(−|V − V(point)|/T) by the curvature, or by the slopes of a kink.
    private static double Width(CriticalPoint point, double temperature)
        => point.IsKink
            ? temperature * (1 / Math.Abs(point.SlopeBefore) + 1 / Math.Abs(point.SlopeAfter))
            : Math.Sqrt(2 * Math.PI * temperature / Math.Abs(point.LowCurvature));

    private static double[] Relaxation(Problem problem, List<CriticalPoint> wells, List<KramersRow> rows)
    {
        var count = wells.Count;
        if (count < 2 || rows.Count == 0)
            return [];
        var matrix = new double[count * count];
        foreach (var row in rows)
            matrix[row.From * count + row.From] += row.Rate;
        // Symmetric form: √(k_ab k_ba) off the diagonal, once a pass.
        for (var k = 0; k < rows.Count; k += 2)
        {
            var coupling = Math.Sqrt(rows[k].Rate) * Math.Sqrt(rows[k + 1].Rate);
            matrix[rows[k].From * count + rows[k].To] -= coupling;
            matrix[rows[k].To * count + rows[k].From] -= coupling;
        }

        if (count == 2)
            return [matrix[0] + matrix[3]];
        var (values, vectors) = (new double[count], new double[count * count]);
        SymmetricEigen.Decompose(matrix, values, vectors);
        // Groups of wells that no pass joins have a zero of their own.
        var groups = Groups(count, rows);
        return values[groups..];
    }

    private static int Groups(int count, List<KramersRow> rows)
    {
        var root = Enumerable.Range(0, count).ToArray();
        int Root(int i) => root[i] == i ? i : root[i] = Root(root[i]);
        foreach (var row in rows)
            root[Root(row.From)] = Root(row.To);
        return Enumerable.Range(0, count).Count(i => Root(i) == i);
    }

    private static int WalkDown(Problem problem, CriticalPoint pass, int sign, List<CriticalPoint> wells, int cells)
    {
        var (domainX, domainY) = (problem.Domain.X, problem.Domain.Y);
        var length = Math.Min(domainX.Length, domainY?.Length ?? domainX.Length) / cells;
        var (x, y) = (pass.X + sign * 0.5 * length * pass.AxisX, pass.Y + sign * 0.5 * length * pass.AxisY);
        double[] gx = [0], gy = problem.Dimension == 2 ? [0] : [];
        var potential = problem.Potential;
        for (var k = 0; k < 40 * cells; k++)
        {
            (x, y) = (domainX.Fold(x), domainY?.Fold(y) ?? 0);
            for (var well = 0; well < wells.Count; well++)
            {
                if (Apart(x - wells[well].X, domainX) <= length && (domainY is null || Apart(y - wells[well].Y, domainY) <= length))
                    return well;
            }

            potential.Gradient([x], problem.Dimension == 2 ? [y] : [], gx, gy);
            var size = Math.Sqrt(gx[0] * gx[0] + (gy.Length > 0 ? gy[0] * gy[0] : 0));
            if (!(size > 0) || !double.IsFinite(size))
                return -1;
            var step = 0.25 * length;
            // In a narrow valley a full step overshoots from wall to wall; half steps until V falls.
            var here = potential.ValueAt(x, y);
            double nextX, nextY;
            do
            {
                (nextX, nextY) = (domainX.Fold(x - step * gx[0] / size), gy.Length > 0 ? domainY!.Fold(y - step * gy[0] / size) : 0);
                step *= 0.5;
            }
            while (potential.ValueAt(nextX, nextY) > here && step > 1e-6 * length);
            if (step <= 1e-6 * length)
                return -1;
            (x, y) = (nextX, nextY);
        }

        return -1;
    }

    private static double Apart(double difference, Interval interval)
    {
        difference = Math.Abs(difference);
        return interval.Ends == AxisEnds.Periodic ? Math.Min(difference, interval.Length - difference) : difference;
    }
}
