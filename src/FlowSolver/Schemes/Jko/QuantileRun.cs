using System.Globalization;
using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Jko;

/// <summary>What a step in quantile coordinates minimises.</summary>
internal enum QuantileRule
{
    /// <summary>W2² to the density before, over twice the step, plus the free energy.</summary>
    ImplicitEuler,

    /// <summary>The two densities before, extrapolated, in the place of the one before.</summary>
    Bdf2,

    /// <summary>Half an implicit Euler step, then as far again.</summary>
    Midpoint,
}

/// <summary>A density in quantile coordinates on its way through JKO steps. Only <see cref="WriteDensity"/> goes back to the grid.</summary>
internal sealed class QuantileRun : FlowRun
{
    private readonly QuantileRule rule;
    private readonly string name;
    private readonly EquilibriumProfile profile;
    private readonly QuantileNewton solver;
    private readonly QuantileGuess guess;
    private readonly QuantileExtrapolation? extrapolation;
    private readonly bool startHasJumps;

    // Cell averages: of the start until the first step is done, then scratch.
    private readonly double[] cells;

    // Node positions and widths before the step, and positions one step earlier; in the order of the rows.
    private readonly double[] before;
    private readonly double[] widthsBefore;
    private readonly double[] endsBefore = new double[QuantileNewton.Lanes + 1];
    private readonly double[] earlier;
    private readonly double[] scratch;
    private double stepBefore;

    // What the first step adds to the squared distance beyond the distance from the centres: gaps of the start and its ends.
    private double startCost;
    private double warnedStep = double.NaN;
    private string? warning;

    public QuantileRun(GridProblem problem, Density start, WorkerTeam team, int parcels, QuantileRule rule, string name) : base(problem, team)
    {
        this.rule = rule;
        this.name = name;
        profile = new EquilibriumProfile(problem);
        var mesh = new QuantileMesh(profile, start.Values, problem.Equilibrium.Values, parcels, QuantileNewton.Lanes);
        solver = new QuantileNewton(profile, mesh, team);
        guess = new QuantileGuess(profile);
        startHasJumps = mesh.HasJumps;
        cells = start.Normalised().Values;
        before = new double[solver.Count];
        widthsBefore = new double[solver.Count];
        earlier = rule == QuantileRule.Bdf2 ? new double[solver.Count] : [];
        extrapolation = rule == QuantileRule.Midpoint ? new QuantileExtrapolation(solver.Count) : null;
        scratch = new double[solver.Count];
        SetStartCenters(mesh);
    }

    /// <summary>Number of parcels.</summary>
    public int Parcels => solver.Count;

    /// <summary>F − F(π) of the density that is a multiple of the equilibrium in each parcel, in units of energy; what a JKO step lowers.</summary>
    public double FreeEnergyExcess() => solver.FreeEnergyExcess();

    /// <summary>Writes the masses of the parcels and the nodes between them, along the axis, positions counted from its lower end.</summary>
    /// <param name="masses">Length the number of parcels.</param>
    /// <param name="nodes">One more.</param>
    public void WriteParcels(Span<double> masses, Span<double> nodes)
    {
        solver.WritePositions(scratch);
        for (var j = 0; j < masses.Length; j++)
        {
            masses[j] = solver.Mass[solver.PlaceOf(j)];
            nodes[j] = scratch[solver.PlaceOf(j)];
        }

        nodes[masses.Length] = solver.Ends[QuantileNewton.Lanes];
    }

    /// <inheritdoc/>
    public override void WriteDensity(Span<double> destination)
    {
        Require.Length(destination.Length, Problem.Grid.CellCount);
        if (StepsTaken == 0)
            cells.CopyTo(destination);
        else
            QuantileTransfer.WriteDensity(solver, profile, scratch, destination);
    }

    /// <inheritdoc/>
    protected override StepReport AdvanceCore(double step)
    {
        var scaled = Problem.Problem.Mobility * step;
        // The start's own centres stand in for its positions: across a gap a node has two.
        if (StepsTaken > 0)
            solver.WritePositions(before);
        else
            solver.Center.CopyTo(before, 0);
        solver.Gap.CopyTo(widthsBefore);
        solver.Ends.CopyTo(endsBefore);

        var halved = rule == QuantileRule.Midpoint && !(StepsTaken == 0 && startHasJumps);
        var effective = halved ? 0.5 * scaled : scaled;
        if (rule == QuantileRule.Bdf2 && StepsTaken > 0)
            effective = SetExtrapolatedCenter(scaled);
        else
            before.CopyTo(solver.Center, 0);

        var report = Minimise(effective);
        var squeezed = 0.0;
        if (halved)
            squeezed = extrapolation!.Double(solver, widthsBefore, endsBefore);
        solver.CloseLanes();
        if (rule == QuantileRule.Bdf2)
            before.CopyTo(earlier, 0);
        stepBefore = scaled;

        var distance = Math.Sqrt(SquaredDistanceFrom(before) + startCost);
        startCost = 0;
        return new StepReport(
            report.Iterations, report.Residual, null, distance, report.Converged ? null : FailureOf(report), WarningOf(scaled, effective, squeezed));
    }

    // From where the nodes are; at the start, and where that fails, from the guess of the least energy.
    private MinimisationReport Minimise(double step)
    {
        if (StepsTaken == 0)
        {
            Guess(step);
            return solver.Minimise(step);
        }

        var report = solver.Minimise(step);
        if (report.Converged)
            return report;
        GoBack();
        QuantileTransfer.WriteDensity(solver, profile, scratch, cells);
        Guess(step);
        var again = solver.Minimise(step);
        return again with { Iterations = report.Iterations + again.Iterations };
    }

    private void Guess(double step)
    {
        var here = solver.EnergyOf(step);
        guess.MoveNodes(solver, cells, step, driftFirst: false);
        var nearEquilibrium = solver.EnergyOf(step);
        GoBack();
        guess.MoveNodes(solver, cells, step, driftFirst: true);
        var drifted = solver.EnergyOf(step);
        if (drifted <= nearEquilibrium && drifted <= here)
            return;
        GoBack();
        if (nearEquilibrium <= here)
            guess.MoveNodes(solver, cells, step, driftFirst: false);
    }

    private void GoBack()
    {
        widthsBefore.CopyTo(solver.Gap);
        endsBefore.CopyTo(solver.Ends);
    }

    // BDF2 with steps τ now and τ/ω before, as one implicit Euler step of length τ(1 + ω)/(1 + 2ω) from ((1 + ω)² xₙ − ω² xₙ₋₁)/(1 + 2ω).
    private double SetExtrapolatedCenter(double step)
    {
        var ratio = step / stepBefore;
        var now = (1 + ratio) * (1 + ratio) / (1 + 2 * ratio);
        var past = ratio * ratio / (1 + 2 * ratio);
        var center = solver.Center;
        for (var i = 0; i < center.Length; i++)
            center[i] = now * before[i] - past * earlier[i];
        return step * (1 + ratio) / (1 + 2 * ratio);
    }

    // Where the start has a gap its two sides differ: the quadratic terms of both sides are one term about their mean, and a constant.
    private void SetStartCenters(QuantileMesh mesh)
    {
        var sum = 0.0;
        for (var j = 0; j <= solver.Count; j++)
        {
            var below = j > 0 ? mesh.Mass[j - 1] : profile.Axis.IsPeriodic ? mesh.Mass[^1] : 0;
            var above = j < solver.Count ? mesh.Mass[j] : 0;
            if (!profile.Axis.IsPeriodic && (j == 0 || j == solver.Count))
            {
                // The ends stand at the walls from the first step on.
                var (far, half) = j == 0 ? (mesh.UpperStart[0], 0.5 * above) : (profile.Axis.Interval.Length - mesh.LowerStart[j], 0.5 * below);
                sum += half * far * far;
            }

            if (j == solver.Count)
                break;
            var apart = mesh.UpperStart[j] - mesh.LowerStart[j];
            if (apart > 0 && (j > 0 || profile.Axis.IsPeriodic))
                sum += 0.5 * below * above / (below + above) * apart * apart;
            solver.Center[solver.PlaceOf(j)] = apart > 0 ? mesh.LowerStart[j] + above / (below + above) * apart : mesh.UpperStart[j];
        }

        startCost = sum;
    }

    // Σ μ (x − origin)² over the nodes; on a line those at the walls do not move.
    private double SquaredDistanceFrom(double[] origin)
    {
        solver.WritePositions(scratch);
        var sum = 0.0;
        var mass = solver.Mass;
        for (var i = QuantileNewton.Lanes; i < mass.Length; i++)
        {
            var way = scratch[i] - origin[i];
            sum += 0.5 * (mass[i] + mass[i - QuantileNewton.Lanes]) * way * way;
        }

        for (var lane = 0; lane < QuantileNewton.Lanes; lane++)
        {
            var way = scratch[lane] - origin[lane];
            sum += solver.NodeMass(0, lane) * way * way;
        }

        return sum;
    }

    private string FailureOf(MinimisationReport report) => string.Create(CultureInfo.InvariantCulture,
        $"The {name} step did not converge: after {report.Iterations} Newton steps the last one still moved the density by {report.Residual:g3}. Use a shorter step.");

    // The sentence on the step's length is made once for each length, so that steps of one length allocate nothing.
    private string? WarningOf(double step, double effective, double squeezed)
    {
        if (step != warnedStep)
        {
            warnedStep = step;
            var factor = 1 + effective * profile.MinimumCurvature;
            warning = factor > 0 ? null : string.Create(CultureInfo.InvariantCulture,
                $"The {name} step of {step / Problem.Problem.Mobility:g4} is too long for a unique minimiser: 1 + θ·step·mobility·min V″ was {factor:g3} (θ = {effective / step:g3}), with V″ = {profile.MinimumCurvature:g3} near x = {profile.Axis.Center(profile.MinimumCurvatureCell):g4}; the density found is a local minimiser. Use a step below {-step / effective / profile.MinimumCurvature / Problem.Problem.Mobility:g3}.");
        }

        return squeezed <= QuantileExtrapolation.NoticeableMass ? warning : string.Create(CultureInfo.InvariantCulture,
            $"The {name} step would have folded the density, and was shortened where {squeezed:g3} of the mass is: it is first order there. Use a shorter step.");
    }
}
