using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;

namespace FlowSolver.Tests.Support;

/// <summary>
/// What every flow scheme must show, on its own terms (its traits). Derive one test class a scheme; override the sizes where the
/// asymptotic range lies elsewhere, and say why there.
/// </summary>
public abstract class FlowSchemeConformance
{
    protected abstract FlowScheme Scheme { get; }

    protected virtual double StationaryTolerance => 1e-9;

    /// <summary>Rise of the discrete free energy that counts as rounding, relative to its drop over the run.</summary>
    protected virtual double EnergySlack => 1e-10;

    protected static Problem DoubleWell(int dimension, AxisEnds ends = AxisEnds.Reflecting)
        => dimension == 1
            ? new Problem(new PolynomialPotential(0, 0.1, -0.5, 0, 0.25), 0.5, new Domain(new Interval(-3.5, 3.5, ends)), new GaussianStart(-0.8, 0.16))
            : new Problem(new PlanePotential(-0.5, 0.3, 1, 0.5), 0.5, new Domain(new Interval(-3.5, 3.5, ends), new Interval(-3, 3, ends)),
                new GaussianStart(-0.6, 0.16, 0.4, 0.2, 0.05));

    protected static Grid GridFor(Problem problem, int cells)
        => new(new Axis(problem.Domain.X, cells), problem.Domain.Y is null ? null : new Axis(problem.Domain.Y, cells));

    protected virtual int CellsFor(int dimension) => dimension == 1 ? 256 : 64;

    public static IEnumerable<object[]> BothDimensions => [[1], [2]];

    private bool Serves(int dimension) => Scheme.Traits.Dimensions.Contains(dimension);

    private static (GridProblem Problem, FlowRun Run) Begin(FlowScheme scheme, Problem problem, int cells, WorkerTeam team, Density? start = null)
    {
        var grid = GridFor(problem, cells);
        var onGrid = new GridProblem(problem, grid);
        return (onGrid, scheme.Begin(onGrid, start ?? StartOnGrid.Create(problem.Start, grid), team));
    }

    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_DoubleWell_KeepsMassAndSign(int dimension)
    {
        if (!Serves(dimension))
            return;
        var (_, run) = Begin(Scheme, DoubleWell(dimension), CellsFor(dimension), WorkerTeam.Alone);
        for (var k = 0; k < 10; k++)
        {
            var report = run.Advance(0.02);
            Assert.Null(report.Failure);
            var density = run.Snapshot();
            Assert.InRange(density.Mass, 1 - 1e-12, 1 + 1e-12);
            Assert.All(density.Values, value => Assert.True(value >= 0 && double.IsFinite(value), $"value {value}"));
        }

        Assert.Equal(10, run.StepsTaken);
        Assert.Equal(0.2, run.Time, 12);
    }

    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_DoubleWell_LowersFreeEnergy(int dimension)
    {
        if (!Serves(dimension) || !Scheme.Traits.DecreasesFreeEnergy)
            return;
        var (problem, run) = Begin(Scheme, DoubleWell(dimension), CellsFor(dimension), WorkerTeam.Alone);
        var first = problem.FreeEnergy(run.Snapshot().Values);
        var before = first;
        for (var k = 0; k < 25; k++)
        {
            run.Advance(0.04);
            var now = problem.FreeEnergy(run.Snapshot().Values);
            Assert.True(now <= before + EnergySlack * (first - problem.EquilibriumFreeEnergy), $"step {k}: {before:r} → {now:r}");
            before = now;
        }

        Assert.True(before < first - 0.1 * (first - problem.EquilibriumFreeEnergy), "The free energy hardly moved.");
    }

    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_FromEquilibrium_LeavesItAlone(int dimension)
    {
        if (!Serves(dimension) || !Scheme.Traits.KeepsEquilibrium)
            return;
        var problem = DoubleWell(dimension);
        var equilibrium = new GridProblem(problem, GridFor(problem, CellsFor(dimension))).Equilibrium;
        var (_, run) = Begin(Scheme, problem, CellsFor(dimension), WorkerTeam.Alone, equilibrium);
        for (var k = 0; k < 5; k++)
            run.Advance(0.05);
        Assert.True(Distance(run.Snapshot(), equilibrium) < StationaryTolerance, $"L1 change {Distance(run.Snapshot(), equilibrium):g3}");
    }

    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_AnyTeam_GivesTheSameBytes(int dimension)
    {
        if (!Serves(dimension))
            return;
        var problem = DoubleWell(dimension, dimension == 1 ? AxisEnds.Reflecting : AxisEnds.Periodic);
        using var team = new WorkerTeam(3);
        var (_, alone) = Begin(Scheme, problem, CellsFor(dimension), WorkerTeam.Alone);
        var (_, shared) = Begin(Scheme, problem, CellsFor(dimension), team);
        for (var k = 0; k < 3; k++)
        {
            alone.Advance(0.03);
            shared.Advance(0.03);
        }

        Assert.Equal(alone.Snapshot().Values, shared.Snapshot().Values);
    }

    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_AfterWarmUp_AllocatesNothing(int dimension)
    {
        if (!Serves(dimension))
            return;
        var (_, run) = Begin(Scheme, DoubleWell(dimension), CellsFor(dimension), WorkerTeam.Alone);
        run.Advance(0.02);
        run.Advance(0.02);
        var before = GC.GetAllocatedBytesForCurrentThread();
        for (var k = 0; k < 5; k++)
            run.Advance(0.02);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }

    /// <summary>Error at t = 0.4 against the same scheme at steps 16 times finer than the finest: order in τ alone, on a fixed grid.</summary>
    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_StepHalved_ShowsOrderInTime(int dimension)
    {
        if (!Serves(dimension) || Scheme.Traits.OrderInTime is not { } order)
            return;
        var finest = RunTo(dimension, StepsForOrder[^1] * 16);
        var observed = ObservedOrder.Measure([.. StepsForOrder.Select(n => 0.4 / n)],
            step => Distance(RunTo(dimension, (int)Math.Round(0.4 / step)), finest));
        observed.AssertFinest(order, OrderSlack);
    }

    protected virtual int[] StepsForOrder => [8, 16, 32];

    protected virtual double OrderSlack => 0.15;

    private Density RunTo(int dimension, int steps)
    {
        var (_, run) = Begin(Scheme, DoubleWell(dimension), CellsFor(dimension), WorkerTeam.Alone);
        for (var k = 0; k < steps; k++)
            run.Advance(0.4 / steps);
        return run.Snapshot();
    }

    /// <summary>Error in h at fixed τ: cell masses of the coarser grid against the next finer one, coarsened.</summary>
    [Theory]
    [MemberData(nameof(BothDimensions))]
    public void Advance_CellsHalved_ShowsOrderInSpace(int dimension)
    {
        if (!Serves(dimension))
            return;
        var counts = CellsForOrder(dimension);
        var densities = new Density[counts.Length];
        for (var level = 0; level < counts.Length; level++)
        {
            var (_, run) = Begin(Scheme, DoubleWell(dimension), counts[level], WorkerTeam.Alone);
            for (var k = 0; k < 4; k++)
                run.Advance(0.05);
            densities[level] = run.Snapshot();
        }

        var errors = new double[counts.Length - 1];
        for (var level = 0; level < errors.Length; level++)
            errors[level] = Distance(densities[level + 1].CoarsenedTo(densities[level].Grid), densities[level]);
        var index = 0;
        var observed = ObservedOrder.Measure([.. counts[..^1].Select(n => 1.0 / n)], _ => errors[index++]);
        observed.AssertAtLeast(Scheme.Traits.OrderInSpace - OrderSlack);
    }

    protected virtual int[] CellsForOrder(int dimension) => dimension == 1 ? [64, 128, 256, 512] : [32, 64, 128];

    /// <summary>∫|a − b|.</summary>
    protected static double Distance(Density a, Density b)
    {
        var sum = 0.0;
        for (var i = 0; i < a.Values.Length; i++)
            sum += Math.Abs(a.Values[i] - b.Values[i]);
        return sum * a.Grid.CellVolume;
    }
}
