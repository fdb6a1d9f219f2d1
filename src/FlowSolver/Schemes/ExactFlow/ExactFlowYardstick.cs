using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// The exact flow's own error in space, by the same flow on half the cells: with a scheme of second order the fine result is off by about
/// <see cref="RichardsonShare"/> of the distance between the two (L. F. Richardson, Phil. Trans. R. Soc. A 210 (1911) 307-357).
/// </summary>
public static class ExactFlowYardstick
{
    /// <summary>Share of the distance between coarse and fine result that is the fine one's error: 1/(2² − 1).</summary>
    public const double RichardsonShare = 1.0 / 3;

    /// <summary>The exact flow on half the cells of each axis, carried to the fine grid at every report time by <see cref="Prolong"/>.</summary>
    /// <param name="fine">The problem on its grid.</param>
    /// <param name="plan">Report times; its steps do not matter.</param>
    /// <param name="team">Threads to use.</param>
    /// <param name="cancellation">Stops between two reports.</param>
    /// <returns>One density a report time; null when the grid has no half.</returns>
    /// <exception cref="OperationCanceledException">The run was stopped.</exception>
    public static IReadOnlyList<Density>? RunOnHalf(GridProblem fine, TimePlan plan, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(fine);
        ArgumentNullException.ThrowIfNull(plan);
        if (fine.Grid.Halved() is not { } half)
            return null;
        var coarse = new GridProblem(fine.Problem, half);
        using var run = new ExactFlowScheme().Begin(coarse, StartOnGrid.Create(fine.Problem.Start, half), team);
        var densities = new List<Density>(plan.ReportTimes.Count);
        for (var report = 0; report < plan.ReportTimes.Count; report++)
        {
            cancellation.ThrowIfCancellationRequested();
            if (report > 0)
                run.Advance(plan.ReportTimes[report] - plan.ReportTimes[report - 1]);
            densities.Add(Prolong(coarse, run.Snapshot(), fine));
        }

        return densities;
    }

    /// <summary>Carries a density from half the cells to the full grid, so smoothly that what differs afterwards is the scheme's error.</summary>
    /// <remarks>
    /// log(ρ/π) is interpolated to the fine centres by cubics along each axis (even at walls, as no flux demands; linearly in ρ/π beside cells
    /// where ρ is 0) and the result multiplied by the fine π and scaled to the same mass: positive, of fourth order, and exact at equilibrium and for
    /// normal densities. Values count as those at the centres, as in the scheme. A cubic is held within the range of the four values that it uses.
    /// </remarks>
    /// <param name="coarse">The problem on half the cells.</param>
    /// <param name="density">Density there.</param>
    /// <param name="fine">The problem on the full grid.</param>
    /// <exception cref="ArgumentException">The grids are not half and full.</exception>
    public static Density Prolong(GridProblem coarse, Density density, GridProblem fine)
    {
        ArgumentNullException.ThrowIfNull(coarse);
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(fine);
        Require.That(density.Grid == coarse.Grid && fine.Grid.Halved() == coarse.Grid,
            "The density was not on half the cells of the fine grid; it must be.");
        var (nx, ny) = (coarse.Grid.Nx, coarse.Grid.Ny);
        var logRatio = new double[nx * ny];
        for (var i = 0; i < logRatio.Length; i++)
            logRatio[i] = Math.Log(density.Values[i]) - coarse.LogEquilibrium(i);
        var values = new double[fine.Grid.CellCount];
        var wide = coarse.Grid.Y is null ? values : new double[2 * nx * ny];
        for (var row = 0; row < ny; row++)
            Refine(logRatio, row * nx, 1, nx, wide, row * 2 * nx, 1, coarse.Grid.X.IsPeriodic);
        if (coarse.Grid.Y is { } axisY)
        {
            for (var i = 0; i < 2 * nx; i++)
                Refine(wide, i, 2 * nx, ny, values, i, 2 * nx, axisY.IsPeriodic);
        }

        for (var i = 0; i < values.Length; i++)
            values[i] = Math.Exp(values[i] + fine.LogEquilibrium(i));
        var mass = SpanKernels.Sum(values) * fine.Grid.CellVolume;
        SpanKernels.Scale(values, density.Mass / mass);
        return new Density(fine.Grid, values);
    }

    // One line: cells 2i and 2i + 1 lie a quarter of a coarse cell below and above centre i.
    private static void Refine(
        double[] source, int sourceStart, int sourceStride, int count, double[] target, int targetStart, int targetStride, bool periodic)
    {
        for (var i = 0; i < count; i++)
        {
            var (a, b, c, d, e) = (At(i - 2), At(i - 1), At(i), At(i + 1), At(i + 2));
            target[targetStart + 2 * i * targetStride] = Quarter(d, c, b, a);
            target[targetStart + (2 * i + 1) * targetStride] = Quarter(b, c, d, e);
        }

        double At(int index)
        {
            if (index < 0)
                index = periodic ? index + count : -index - 1;
            else if (index >= count)
                index = periodic ? index - count : 2 * count - 1 - index;
            return source[sourceStart + index * sourceStride];
        }
    }

    // The cubic through four equidistant values, a quarter of the way from the second to the third.
    private static double Quarter(double before, double here, double next, double after)
    {
        var least = Math.Min(Math.Min(before, here), Math.Min(next, after));
        if (!double.IsFinite(least))
            return Math.Log(0.75 * Math.Exp(here) + 0.25 * Math.Exp(next));
        var most = Math.Max(Math.Max(before, here), Math.Max(next, after));
        var cubic = -0.0546875 * before + 0.8203125 * here + 0.2734375 * next - 0.0390625 * after;
        return Math.Clamp(cubic, least, most);
    }
}
