using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Schemes.ExactFlow;

namespace FlowSolver.Studies;

/// <summary>One mode of relaxation: a row of <c>modes.csv</c>.</summary>
/// <param name="Mode">0 for equilibrium, then by growing rate.</param>
/// <param name="Rate">Its rate of decay on the grid, in 1/time; 0 for equilibrium.</param>
/// <param name="Timescale">1/rate; null for equilibrium.</param>
/// <param name="GridError">Estimate of the rate's error from half the cells (a third of the difference); null where there is no half.</param>
/// <param name="StartShare">∫ρ₀u: how much of the start is in the mode, ρ(t) = π Σ share·e^(−rate·t)·u.</param>
/// <param name="Residual">What the eigenproblem left over, √∫(Lu + rate·u)²π, in 1/time.</param>
public sealed record ModeRow(int Mode, double Rate, double? Timescale, double? GridError, double StartShare, double Residual)
{
    /// <summary>The rate with the estimated grid error taken off: of fourth order on smooth problems. The rate itself where there is no estimate.</summary>
    public double ExtrapolatedRate => Rate + (GridError ?? 0);
}

/// <summary>Distance from equilibrium over time: what the exact flow did beside what its slow modes say.</summary>
/// <param name="Time">t.</param>
/// <param name="Measured">√∫(ρ − π)²/π along the exact flow.</param>
/// <param name="Predicted">√Σ (share·e^(−rate·t))² over the modes found.</param>
/// <param name="MeasuredRate">Rate of decay of <paramref name="Measured"/> since the row before; null in the first.</param>
/// <param name="PredictedRate">The same of <paramref name="Predicted"/>.</param>
public sealed record DecayRow(double Time, double Measured, double Predicted, double? MeasuredRate, double? PredictedRate);

/// <summary>Mean time for a walker at the bottom of one well to reach another.</summary>
/// <param name="From">Index of the well at the start, among the wells.</param>
/// <param name="To">Index of the well that is reached.</param>
/// <param name="Time">Mean first passage time.</param>
/// <param name="KramersTime">1/rate by the formula of Kramers and Eyring where one pass joins the two; null elsewhere.</param>
public sealed record PassageRow(int From, int To, double Time, double? KramersTime);

/// <summary>What is asked of <see cref="Relaxation.Analyse"/>.</summary>
public sealed record RelaxationOptions
{
    /// <summary>Number of modes beside equilibrium.</summary>
    public int Modes { get; init; } = 6;

    /// <summary>Bound on the residual of a mode relative to √(rate · last rate); the share of the rate that is wrong is about its square.</summary>
    public double Tolerance { get; init; } = 1e-5;

    /// <summary>Largest number of wells between which passage times are computed, deepest first.</summary>
    public int MostWells { get; init; } = 4;

    /// <summary>Whether the exact flow is run beside the prediction from the modes.</summary>
    public bool MeasureDecay { get; init; } = true;
}

/// <summary>Everything that the study found.</summary>
public sealed record RelaxationResult
{
    /// <summary>The problem on its grid.</summary>
    public required GridProblem Problem { get; init; }

    /// <summary>Equilibrium first, then the modes by growing rate.</summary>
    public required IReadOnlyList<ModeRow> Modes { get; init; }

    /// <summary>
    /// Shape of each mode relative to equilibrium, one value a cell, in the order of <see cref="Modes"/>: ∫u²π = 1; the density of the mode is πu. Without
    /// meaning where π underflows.
    /// </summary>
    public required IReadOnlyList<double[]> Shapes { get; init; }

    /// <summary>The smallest rate above 0: how fast the last memory of the start decays.</summary>
    public double SpectralGap => Modes[1].Rate;

    /// <summary>Wells, passes, rates of the formula of Kramers and Eyring.</summary>
    public required KramersResult Kramers { get; init; }

    /// <summary>Mean first passage times between the deepest wells.</summary>
    public required IReadOnlyList<PassageRow> Passages { get; init; }

    /// <summary>Probability of reaching the second of the two deepest wells before the first, one value a cell; null with fewer than two wells.</summary>
    public required double[]? Committor { get; init; }

    /// <summary>Diffusion over many turns of the periodic axes; null when there is none.</summary>
    public required DiffusionTensor? Diffusion { get; init; }

    /// <summary>Decay of the exact flow beside the prediction, as far as a few seconds of work lead; empty when not asked for.</summary>
    public required IReadOnlyList<DecayRow> Decay { get; init; }

    /// <summary>Warnings and failures.</summary>
    public required IReadOnlyList<Remark> Remarks { get; init; }
}

/// <summary>How a problem relaxes: rates and modes of the generator, passage times, escape rates and effective diffusion.</summary>
/// <remarks>
/// Rates are the eigenvalues of −A of the exact flow's <see cref="Generator"/> (H. Risken, The Fokker-Planck Equation, 2nd ed. 1989, chapter 5). On a line
/// they are bisected to nearly full relative accuracy (<see cref="ChainSpectrum"/>); in the plane block iteration with multigrid finds them
/// (<see cref="SmallestModes"/>).
/// </remarks>
public static class Relaxation
{
    // Cells times products.
    private const double MostDecayWork = 1.5e9;

    /// <summary>Runs the study.</summary>
    /// <param name="problem">The problem on its grid.</param>
    /// <param name="options">What is asked.</param>
    /// <param name="team">Threads to use; results do not depend on their number.</param>
    /// <param name="cancellation">Stops between its parts.</param>
    /// <exception cref="ArgumentException">More modes are asked for than a quarter of the cells.</exception>
    /// <exception cref="OperationCanceledException">The study was stopped.</exception>
    public static RelaxationResult Analyse(GridProblem problem, RelaxationOptions options, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(options);
        ArgumentNullException.ThrowIfNull(team);
        var remarks = new List<Remark>();
        var generator = new Generator(problem, team);
        var modes = FindModes(generator, options.Modes, options.Tolerance, team, cancellation);
        if (!modes.Converged)
            remarks.Add(new Remark(null, null, "The slow modes did not converge to the tolerance asked for; rates may be off in their last digits.", true));
        var coarse = CoarseRates(problem, options, team, cancellation);
        var start = StartOnGrid.Create(problem.Problem.Start, problem.Grid);
        var (rows, shapes) = Rows(problem, modes, coarse, start);
        cancellation.ThrowIfCancellationRequested();
        var kramers = KramersEstimate.Of(problem.Problem, Math.Clamp(Math.Max(problem.Grid.Nx, problem.Grid.Ny), 128, 1024));
        var (passages, committor) = Passages(generator, kramers, options.MostWells, remarks, cancellation);
        return new RelaxationResult
        {
            Problem = problem,
            Modes = rows,
            Shapes = shapes,
            Kramers = kramers,
            Passages = passages,
            Committor = committor,
            Diffusion = EffectiveDiffusion.Of(generator),
            Decay = options.MeasureDecay ? Decay(generator, start, rows, team, cancellation) : [],
            Remarks = remarks,
        };
    }

    /// <summary>The slow rates and modes of a generator, without anything around them.</summary>
    /// <param name="generator">The rates of the jump process.</param>
    /// <param name="number">How many, from 1 to a quarter of the cells.</param>
    /// <param name="tolerance">Bound on a residual relative to √(rate · last rate); used in the plane.</param>
    /// <param name="team">Threads to use.</param>
    /// <param name="cancellation">Stops between two iterations.</param>
    public static NetworkModes FindModes(
        Generator generator, int number, double tolerance, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(generator);
        ArgumentNullException.ThrowIfNull(team);
        Require.AtLeast(number, 1);
        Require.That(number <= generator.Grid.CellCount / 4,
            $"number of modes was {number}; it must be at most a quarter of the {generator.Grid.CellCount} cells.");
        if (generator.Grid.Y is { } axisY)
        {
            // A hundredth of the slowest rate of diffusion over the empty domain.
            var (lengthX, lengthY) = (generator.Grid.X.Interval.Length, axisY.Interval.Length);
            var shift = 0.01 * generator.Problem.Problem.Mobility * generator.Problem.Problem.Temperature * Math.PI * Math.PI / Math.Max(lengthX * lengthX, lengthY * lengthY);
            return new SmallestModes(GeneratorNetwork.Of(generator), shift, team).Find(number, tolerance, cancellation);
        }

        var count = generator.Grid.CellCount;
        var back = new double[count];
        for (var i = 0; i < count; i++)
            back[i] = generator.RateLeft[generator.RightOf(i)];
        var masses = GeneratorNetwork.Masses(generator);
        var chain = new ChainSpectrum(generator.RateRight, back, masses);
        var rates = chain.Smallest(number, team);
        var modes = chain.Modes(rates);
        var residuals = new double[number];
        var applied = new double[count];
        for (var k = 0; k < number; k++)
        {
            generator.ApplyBackward(modes[k], applied);
            var sum = 0.0;
            for (var i = 0; i < count; i++)
                sum += masses[i] * (applied[i] + rates[k] * modes[k][i]) * (applied[i] + rates[k] * modes[k][i]);
            residuals[k] = Math.Sqrt(sum);
        }

        return new NetworkModes(rates, modes, residuals, 0, true);
    }

    private static double[]? CoarseRates(GridProblem problem, RelaxationOptions options, WorkerTeam team, CancellationToken cancellation)
    {
        if (problem.Grid.Halved() is not { } half || half.CellCount / 4 < options.Modes)
            return null;
        return FindModes(new Generator(new GridProblem(problem.Problem, half), team), options.Modes, options.Tolerance, team, cancellation).Rates;
    }

    private static (List<ModeRow> Rows, List<double[]> Shapes) Rows(GridProblem problem, NetworkModes modes, double[]? coarse, Density start)
    {
        var ones = new double[problem.Grid.CellCount];
        Array.Fill(ones, 1);
        var rows = new List<ModeRow> { new(0, 0, null, coarse is null ? null : 0, 1, 0) };
        var shapes = new List<double[]> { ones };
        for (var k = 0; k < modes.Rates.Length; k++)
        {
            var share = SpanKernels.Dot(start.Values, modes.Modes[k]) * problem.Grid.CellVolume;
            rows.Add(new ModeRow(k + 1, modes.Rates[k], 1 / modes.Rates[k], coarse is null ? null : (modes.Rates[k] - coarse[k]) / 3, share, modes.Residuals[k]));
            shapes.Add(modes.Modes[k]);
        }

        return (rows, shapes);
    }

    private static (List<PassageRow> Rows, double[]? Committor) Passages(
        Generator generator, KramersResult kramers, int mostWells, List<Remark> remarks, CancellationToken cancellation)
    {
        var rows = new List<PassageRow>();
        var wells = Math.Min(kramers.Wells.Count, mostWells);
        if (wells < 2)
            return (rows, null);
        var sets = new bool[wells][];
        for (var well = 0; well < wells; well++)
            sets[well] = WellSet(generator, kramers, well);
        for (var to = 0; to < wells; to++)
        {
            cancellation.ThrowIfCancellationRequested();
            var onLine = generator.Grid.Y is null && !generator.Grid.X.IsPeriodic;
            var times = onLine || AllTrue(sets[to]) ? null : PassageTimes.MeanToSet(generator, sets[to]);
            for (var from = 0; from < wells; from++)
            {
                if (from == to)
                    continue;
                var time = onLine ? PassageTimes.BetweenPoints(generator, kramers.Wells[from].X, kramers.Wells[to].X)
                    : times is null ? 0 : times[CellOf(generator.Grid, kramers.Wells[from])];
                if (!double.IsFinite(time))
                {
                    remarks.Add(new Remark(null, null, $"The time from well {from} to well {to} is so long that its solution lost all digits; it is left out.", false));
                    continue;
                }

                var rates = kramers.Rows.Where(row => row.From == from && row.To == to).ToList();
                rows.Add(new PassageRow(from, to, time, rates.Count == 0 ? null : 1 / rates.Sum(row => row.Rate)));
            }
        }

        rows.Sort((a, b) => a.From != b.From ? a.From.CompareTo(b.From) : a.To.CompareTo(b.To));
        for (var cell = 0; cell < sets[0].Length; cell++)
        {
            if (sets[0][cell] && sets[1][cell])
                return (rows, null);
        }

        return (rows, PassageTimes.Committor(generator, sets[0], sets[1]));
    }

    private static bool AllTrue(bool[] set) => Array.TrueForAll(set, member => member);

    private static int CellOf(Grid grid, CriticalPoint point) => (grid.Y?.CellOf(point.Y) ?? 0) * grid.Nx + grid.X.CellOf(point.X);

    /// <summary>
    /// The cells that count as having reached a well: those joined to its bottom below V(bottom) + T, or below half of its lowest barrier where that is lower; at
    /// least the cell of the bottom.
    /// </summary>
    /// <param name="generator">The rates.</param>
    /// <param name="kramers">Wells and passes.</param>
    /// <param name="well">Index of the well.</param>
    public static bool[] WellSet(Generator generator, KramersResult kramers, int well)
    {
        ArgumentNullException.ThrowIfNull(generator);
        ArgumentNullException.ThrowIfNull(kramers);
        var grid = generator.Grid;
        var bottom = kramers.Wells[well];
        var rise = generator.Problem.Problem.Temperature;
        foreach (var row in kramers.Rows)
        {
            if (row.From == well)
                rise = Math.Min(rise, 0.5 * row.Barrier);
        }

        var members = new bool[grid.CellCount];
        var potential = generator.Problem.CellPotential;
        var open = new Stack<int>();
        open.Push(CellOf(grid, bottom));
        members[open.Peek()] = true;
        while (open.Count > 0)
        {
            var cell = open.Pop();
            var (i, j) = (cell % grid.Nx, cell / grid.Nx);
            Visit(i > 0 ? cell - 1 : grid.X.IsPeriodic ? cell + grid.Nx - 1 : -1);
            Visit(i < grid.Nx - 1 ? cell + 1 : grid.X.IsPeriodic ? cell - grid.Nx + 1 : -1);
            if (grid.Y is null)
                continue;
            Visit(j > 0 ? cell - grid.Nx : grid.Y.IsPeriodic ? cell + grid.CellCount - grid.Nx : -1);
            Visit(j < grid.Ny - 1 ? cell + grid.Nx : grid.Y.IsPeriodic ? cell - grid.CellCount + grid.Nx : -1);
        }

        return members;

        void Visit(int cell)
        {
            if (cell < 0 || members[cell] || potential[cell] > bottom.Potential + rise)
                return;
            members[cell] = true;
            open.Push(cell);
        }
    }

    // Eight times, up to four of the slowest timescales that the start has a share in, and over a factor of twenty. In the plane the exact flow
    // takes about √(30tΛ) products: over very long timescales it is followed only as far as some seconds of work lead.
    private static List<DecayRow> Decay(
        Generator generator, Density start, List<ModeRow> modes, WorkerTeam team, CancellationToken cancellation)
    {
        var problem = generator.Problem;
        var rows = new List<DecayRow>();
        var slowest = modes.Skip(1).FirstOrDefault(mode => Math.Abs(mode.StartShare) > 1e-6);
        if (slowest is null || !(slowest.Rate > 0))
            return rows;
        var products = MostDecayWork / problem.Grid.CellCount;
        var until = Math.Min(4 / slowest.Rate, problem.Grid.Y is null ? double.PositiveInfinity : products * products / (30 * generator.SpectralBound));
        using var run = new ExactFlowScheme().Begin(problem, start, team);
        var equilibrium = problem.Equilibrium.Values;
        var before = 0.0;
        for (var k = 0; k < 8; k++)
        {
            cancellation.ThrowIfCancellationRequested();
            var time = until * Math.Pow(20, k / 7.0 - 1);
            if (run.Advance(time - before).Failure is not null)
                break;
            var density = run.Snapshot().Values;
            double square = 0, predicted = 0;
            for (var i = 0; i < density.Length; i++)
            {
                if (equilibrium[i] > 1e-290)
                    square += (density[i] - equilibrium[i]) * ((density[i] - equilibrium[i]) / equilibrium[i]);
            }

            foreach (var mode in modes.Skip(1))
            {
                var part = mode.StartShare * Math.Exp(-mode.Rate * time);
                predicted += part * part;
            }

            var measured = Math.Sqrt(square * problem.Grid.CellVolume);
            predicted = Math.Sqrt(predicted);
            rows.Add(rows.Count == 0
                ? new DecayRow(time, measured, predicted, null, null)
                : new DecayRow(time, measured, predicted, Math.Log(rows[^1].Measured / measured) / (time - before), Math.Log(rows[^1].Predicted / predicted) / (time - before)));
            before = time;
        }

        return rows;
    }
}
