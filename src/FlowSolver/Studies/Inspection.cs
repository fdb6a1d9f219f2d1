using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Studies;

/// <summary>What can be said about a problem before anything long is computed.</summary>
public sealed record Inspection
{
    /// <summary>Least eigenvalue of D²V over all cells: m where it is above 0 (V is then m-strongly convex on the domain).</summary>
    public required double LeastCurvature { get; init; }

    /// <summary>Largest eigenvalue of D²V over all cells: L.</summary>
    public required double LargestCurvature { get; init; }

    /// <summary>Least eigenvalue of D²V where probability is (see <see cref="LiveShare"/>).</summary>
    public required double LeastLiveCurvature { get; init; }

    /// <summary>Largest eigenvalue of D²V where probability is.</summary>
    public required double LargestLiveCurvature { get; init; }

    /// <summary>Share of the cells that hold all but 10⁻⁹ of the start and of the equilibrium.</summary>
    public required double LiveShare { get; init; }

    /// <summary>M·τ·max D²V where probability is: an explicit step is stable below 2 and its map does not fold below 1.</summary>
    public required double StepTimesCurvature { get; init; }

    /// <summary>Longest step for which explicit transport is stable where probability is, 2/(M·L); null where no curvature is above 0.</summary>
    public required double? StableStep { get; init; }

    /// <summary>Longest step with a unique minimiser in JKO and proximal steps, −1/(M·m); null where V is convex and any step will do.</summary>
    public required double? UniqueStep { get; init; }

    /// <summary>Equilibrium mass in the cells that touch a wall; 0 without walls.</summary>
    public required double EquilibriumWallMass { get; init; }

    /// <summary>Start mass in the cells that touch a wall.</summary>
    public required double StartWallMass { get; init; }

    /// <summary>Largest |V(x_i) − V(x_j)|/T between neighbours where density is above a thousandth of its largest: the grid resolves the landscape well below 1.</summary>
    public required double CellContrast { get; init; }

    /// <summary>Cell-steps of one stepping method: cells × steps.</summary>
    public required double CellSteps { get; init; }

    /// <summary>Walker-steps of one sampler.</summary>
    public required double WalkerSteps { get; init; }

    /// <summary>What the reader should know, in sentences.</summary>
    public required IReadOnlyList<string> Warnings { get; init; }

    /// <summary>Looks at a problem on its grid.</summary>
    /// <exception cref="InputException">The start or the potential cannot be put on the grid.</exception>
    public static Inspection Of(Problem problem, Grid grid, TimePlan plan, int walkers)
    {
        ArgumentNullException.ThrowIfNull(plan);
        var onGrid = new GridProblem(problem, grid);
        var start = StartOnGrid.Create(problem.Start, grid);
        var live = LiveCells(start, onGrid.Equilibrium, 1e-9);
        var (least, largest, leastLive, largestLive) = Curvatures(problem, grid, live);
        var rate = problem.Mobility * plan.Step;
        var inspection = new Inspection
        {
            LeastCurvature = least,
            LargestCurvature = largest,
            LeastLiveCurvature = leastLive,
            LargestLiveCurvature = largestLive,
            LiveShare = live.Count(cell => cell) / (double)live.Length,
            StepTimesCurvature = rate * Math.Max(largestLive, 0),
            StableStep = largestLive > 0 ? 2 / (problem.Mobility * largestLive) : null,
            UniqueStep = leastLive < 0 ? -1 / (problem.Mobility * leastLive) : null,
            EquilibriumWallMass = WallMass(onGrid.Equilibrium),
            StartWallMass = WallMass(start),
            CellContrast = Contrast(onGrid, LiveCells(start, onGrid.Equilibrium, 1e-3)),
            CellSteps = (double)grid.CellCount * plan.TotalSteps,
            WalkerSteps = (double)walkers * plan.TotalSteps,
            Warnings = [],
        };
        return inspection with { Warnings = Sentences(inspection, plan) };
    }

    private static List<string> Sentences(Inspection found, TimePlan plan)
    {
        var list = new List<string>();
        if (found.StepTimesCurvature >= 2)
        {
            list.Add(FormattableString.Invariant(
                $"Explicit steps (ula, split-gradient) are unstable where walkers go: step × mobility × largest curvature is {found.StepTimesCurvature:g3}, and must be below 2. A step below {found.StableStep:g3} would do."));
        }
        else if (found.StepTimesCurvature > 1)
        {
            list.Add(FormattableString.Invariant(
                $"The map of an explicit step folds where the curvature is largest: step × mobility × curvature is {found.StepTimesCurvature:g3}, above 1. A step below {found.StableStep / 2:g3} avoids it."));
        }

        if (found.UniqueStep is { } unique && plan.Step >= unique)
        {
            list.Add(FormattableString.Invariant(
                $"JKO and proximal steps of {plan.Step:g3} may have more than one minimiser in this landscape; below {unique:g3} there is one."));
        }

        if (found.EquilibriumWallMass > 1e-4)
            list.Add(FormattableString.Invariant($"At equilibrium {100 * found.EquilibriumWallMass:g2} % of the mass lies in the cells at the walls: the walls shape the result. Widen the domain if they are not meant to."));
        if (found.StartWallMass > 1e-4)
            list.Add(FormattableString.Invariant($"{100 * found.StartWallMass:g2} % of the start lies in the cells at the walls."));
        if (found.CellContrast > 2)
            list.Add(FormattableString.Invariant($"The potential changes by up to {found.CellContrast:g2} T from one cell to the next where probability is: more cells are needed for a small grid error."));
        if (!plan.IsUniform)
            list.Add(FormattableString.Invariant($"Some report intervals are no multiple of the step {plan.Step}; their steps will be shortened to fit."));
        return list;
    }

    // Cells above a share of the largest value: they hold all but about that share of the mass, and finding them needs no sort.
    private static bool[] LiveCells(Density start, Density equilibrium, double share)
    {
        var live = new bool[start.Values.Length];
        foreach (var density in new[] { start, equilibrium })
        {
            var border = share * SpanKernels.MaxAbs(density.Values);
            for (var i = 0; i < live.Length; i++)
                live[i] |= density.Values[i] > border;
        }

        return live;
    }

    private static (double Least, double Largest, double LeastLive, double LargestLive) Curvatures(Problem problem, Grid grid, bool[] live)
    {
        var n = grid.Nx;
        var plane = grid.Dimension == 2;
        var (x, y) = (new double[n], new double[plane ? n : 0]);
        var (value, gx, hxx) = (new double[n], new double[n], new double[n]);
        var (gy, hxy, hyy) = (new double[y.Length], new double[y.Length], new double[y.Length]);
        var (least, largest, leastLive, largestLive) = (double.PositiveInfinity, double.NegativeInfinity, double.PositiveInfinity, double.NegativeInfinity);
        for (var row = 0; row < grid.Ny; row++)
        {
            grid.RowCenters(row, x, y);
            problem.Potential.Jet(x, y, new PotentialJet { Value = value, GradientX = gx, GradientY = gy, HessianXX = hxx, HessianXY = hxy, HessianYY = hyy });
            for (var i = 0; i < n; i++)
            {
                var (low, high) = (hxx[i], hxx[i]);
                if (plane)
                {
                    var mean = 0.5 * (hxx[i] + hyy[i]);
                    var half = Math.Sqrt(0.25 * (hxx[i] - hyy[i]) * (hxx[i] - hyy[i]) + hxy[i] * hxy[i]);
                    (low, high) = (mean - half, mean + half);
                }

                if (!double.IsFinite(low) || !double.IsFinite(high))
                    continue;
                (least, largest) = (Math.Min(least, low), Math.Max(largest, high));
                if (live[row * n + i])
                    (leastLive, largestLive) = (Math.Min(leastLive, low), Math.Max(largestLive, high));
            }
        }

        return (least, largest, leastLive, largestLive);
    }

    private static double WallMass(Density density)
    {
        var grid = density.Grid;
        var sum = 0.0;
        for (var row = 0; row < grid.Ny; row++)
        {
            var atWallY = grid.Y is { IsPeriodic: false } && (row == 0 || row == grid.Ny - 1);
            for (var i = 0; i < grid.Nx; i++)
            {
                if (atWallY || (!grid.X.IsPeriodic && (i == 0 || i == grid.Nx - 1)))
                    sum += density.Values[row * grid.Nx + i];
            }
        }

        return sum * grid.CellVolume;
    }

    private static double Contrast(GridProblem problem, bool[] live)
    {
        var (grid, v) = (problem.Grid, problem.CellPotential);
        var largest = 0.0;
        for (var cell = 0; cell < v.Length; cell++)
        {
            if (!live[cell])
                continue;
            if (cell % grid.Nx + 1 < grid.Nx && live[cell + 1])
                largest = Math.Max(largest, Math.Abs(v[cell + 1] - v[cell]));
            if (cell + grid.Nx < v.Length && live[cell + grid.Nx])
                largest = Math.Max(largest, Math.Abs(v[cell + grid.Nx] - v[cell]));
        }

        return largest / problem.Problem.Temperature;
    }
}
