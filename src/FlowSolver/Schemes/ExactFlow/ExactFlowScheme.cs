using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// The drift-diffusion equation itself, exact in time: ρ(t + τ) = e^(τA)ρ(t) with A the exponentially fitted finite volumes of <see cref="Generator"/>.
/// The yardstick of all other methods.
/// </summary>
/// <remarks>
/// <para>Order in time: none, a step of any length has no stepping error; order in space: 2 on smooth problems (its error is estimated by
/// <see cref="ExactFlowYardstick"/>). Kept exactly: equilibrium (to rounding), mass (re-normalised to the mass at the start after each step),
/// decrease of the free energy. Positive: A's exponential is; what rounding and the tolerance leave below 0 is set to 0, and where true values lie
/// below about 1e-16 of the densities around them the digits are noise.</para>
/// <para>In time: in one dimension a rational approximation (<see cref="RationalPropagator"/>) at a cost that does not depend on the step, or a
/// Chebyshev expansion where that takes fewer than a dozen products; in two dimensions a Chebyshev expansion
/// (<see cref="ChebyshevPropagator"/>), about √(2τΛ·log(1/tolerance)) products. <see cref="StepReport.Iterations"/> counts products and, for the
/// rational approximation, its eight solves.</para>
/// <para>Mass that starts many temperatures above the minimum is carried in several shorter steps, because truncation and rounding are small in the
/// norm weighted by 1/π, not in mass (<see cref="ErrorReach"/>). Rates in cells so high that they never hold a share of 1e-14 of the mass are
/// scaled down with those of the way back, which leaves equilibrium alone and keeps Λ moderate.</para>
/// <para>Tolerance: <see cref="Tolerance"/> bounds ∫|error| over one step, rounding included as far as double precision allows.</para>
/// <para>Prefer another method only to study it. Source: H. Tal-Ezer, SIAM J. Numer. Anal. 23 (1986) 11-26 (Chebyshev in time, from memory); rates
/// and rational approximation: see there.</para>
/// </remarks>
public sealed class ExactFlowScheme : FlowScheme
{
    private readonly double tolerance = 1e-12;

    /// <summary>Bound on ∫|error in time| of one step; default 1e-12, from 1e-14 (which rounding may exceed) to 1e-2.</summary>
    public double Tolerance
    {
        get => tolerance;
        init => tolerance = value is >= 1e-14 and <= 1e-2
            ? value
            : throw new ArgumentOutOfRangeException(nameof(value), $"Tolerance was {value}; it must be from 1e-14 to 1e-2.");
    }

    /// <inheritdoc/>
    public override SchemeTraits Traits { get; } = new(
        "exact", "The equation itself: exponentially fitted finite volumes, exact in time.", null, 2, true, true, [1, 2],
        "Scharfetter, Gummel 1969; Chang, Cooper 1970; Tal-Ezer 1986; Trefethen, Weideman, Schmelzer 2006");

    /// <inheritdoc/>
    protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team)
        => new ExactFlowRun(new Generator(problem, team), start, team, Tolerance);
}

/// <summary>A run of <see cref="ExactFlowScheme"/>.</summary>
internal sealed class ExactFlowRun : FlowRun
{
    // Steepness of the weights in which local errors are measured; larger values allow longer steps and cost digits.
    private const double ChebyshevDrift = 2;
    private const double RationalDrift = 0.1;
    // In one dimension a solve for all poles costs about as much as so many products.
    private const int ProductsOfSolve = 16;
    private const int MostHalvings = 60;

    private readonly Generator generator;
    private readonly double tolerance;
    private readonly double mostReach;
    private readonly double[] density;
    private readonly double startMass;
    private readonly double highestRatio;
    private readonly ErrorReach reach;
    private readonly RationalPropagator? rational;
    private readonly ChebyshevPropagator chebyshev;
    private double cappedTime;
    private double substep = double.PositiveInfinity;
    private double lostMass;

    public ExactFlowRun(Generator generator, Density start, WorkerTeam team, double tolerance) : base(generator.Problem, team)
    {
        this.generator = generator;
        this.tolerance = tolerance;
        // A reach of one hundred costs two digits of the fourteen at hand.
        mostReach = Math.Clamp(tolerance * 1e14, 10, 1e6);
        density = (double[])start.Values.Clone();
        startMass = SpanKernels.Sum(density);
        highestRatio = HighestRatio();
        reach = new ErrorReach(generator);
        rational = generator.Grid.Y is null ? new RationalPropagator(generator) : null;
        chebyshev = new ChebyshevPropagator(generator, team);
    }

    public override void WriteDensity(Span<double> destination)
    {
        Require.Length(destination.Length, density.Length);
        density.CopyTo(destination);
    }

    protected override StepReport AdvanceCore(double step)
    {
        lostMass = 0;
        CapRates(step);
        var work = 0;
        var left = step;
        while (left > 0)
        {
            var global = reach.Global(density);
            if (global > mostReach)
            {
                DropTails();
                global = reach.Global(density);
            }

            if (global <= mostReach)
            {
                work += Whole(left, global);
                left = 0;
                continue;
            }

            substep = Math.Min(2 * substep, left);
            if (!FindSubstep(left))
            {
                return new StepReport(work, Failure: "The density sits so far above the minimum, or the potential is so steep, that no step was short enough to be carried without losing all digits.");
            }

            work += Part(substep);
            left = substep >= left ? 0 : left - substep;
        }

        return lostMass > Math.Max(1e-8, 10 * tolerance)
            ? new StepReport(work, Failure: FormattableString.Invariant($"Rounding or the tolerance moved a share of {lostMass:g2} of the mass in this step; the result has lost its accuracy."))
            : new StepReport(work);
    }

    private int Whole(double time, double amplification)
    {
        var limit = tolerance / (4 * Math.Max(1, amplification));
        if (rational is not null && chebyshev.ProductsFor(time, limit, 0) > (rational.IsFactored(time) ? ProductsOfSolve / 2 : ProductsOfSolve))
        {
            rational.Advance(density, time);
            Repair();
            return RationalExponential.Poles;
        }

        var products = chebyshev.Advance(density, time, limit, 0);
        Repair();
        return products;
    }

    private bool FindSubstep(double left)
    {
        for (var k = 0; k < MostHalvings; k++)
        {
            if (reach.Local(density, substep, ChebyshevDrift) <= mostReach)
                return true;
            substep = Math.Min(0.5 * substep, left);
        }

        return false;
    }

    private int Part(double time)
    {
        var limit = tolerance / (4 * mostReach);
        // The rational approximation bears weights less steep by the ratio of the drifts, so that it would take that many more steps.
        if (rational is not null && chebyshev.ProductsFor(time, limit, ChebyshevDrift) > ProductsOfSolve * (ChebyshevDrift / RationalDrift))
        {
            substep = time * (RationalDrift / ChebyshevDrift);
            rational.Advance(density, substep);
            Repair();
            return RationalExponential.Poles;
        }

        var products = chebyshev.Advance(density, time, limit, ChebyshevDrift);
        Repair();
        return products;
    }

    // Negative rounding to 0, mass back to that of the start.
    private void Repair()
    {
        var negative = 0.0;
        for (var i = 0; i < density.Length; i++)
        {
            if (density[i] < 0)
            {
                negative -= density[i];
                density[i] = 0;
            }
        }

        var mass = SpanKernels.Sum(density);
        lostMass += (negative + Math.Abs(mass - negative - startMass)) / startMass;
        SpanKernels.Scale(density, startMass / mass);
    }

    // Cells that hold next to nothing far up the potential would decide the length of the steps. The flow fills them again at once.
    private void DropTails()
    {
        var least = Negligible;
        for (var i = 0; i < density.Length; i++)
        {
            if (density[i] < least)
                density[i] = 0;
        }
    }

    // All cells below it together hold less than 1e-16 of the mass.
    private double Negligible => 1e-16 * startMass / density.Length;

    // max ρ/π over cells that matter, which the flow never raises; infinite where π underflows under the start.
    private double HighestRatio()
    {
        var equilibrium = Problem.Equilibrium.Values;
        var least = Negligible;
        var highest = 0.0;
        for (var i = 0; i < density.Length; i++)
        {
            if (density[i] >= least)
                highest = Math.Max(highest, density[i] / equilibrium[i]);
        }

        return highest;
    }

    // Lowers the largest rates as long as the mass that could ever notice is below 1e-14: with ρ ≤ π·max(ρ/π) at all times, scaling the rates
    // of an edge by f changes ∫|ρ(t)| by at most 2t(1 − f) times the largest flux that the edge can carry (Duhamel's formula).
    private void CapRates(double time)
    {
        if (time <= cappedTime)
            return;
        cappedTime = time;
        var largest = 0.0;
        for (var i = 0; i < density.Length; i++)
            largest = Math.Max(largest, LargestFrom(i));
        var problem = Problem.Problem;
        var width = Math.Min(Problem.Grid.X.Width, Problem.Grid.Y?.Width ?? double.PositiveInfinity);
        var plain = 2 * problem.Mobility * problem.Temperature / (width * width);
        var cap = double.PositiveInfinity;
        for (var next = largest / 2; next > plain && highestRatio < 1e100 && LossUnder(next) * time <= 1e-14; next /= 2)
            cap = next;
        chebyshev.SetRates(cap);
    }

    private double LargestFrom(int cell)
    {
        var line = Math.Max(generator.RateRight[cell], generator.RateLeft[cell]);
        return generator.RateUp.Length == 0 ? line : Math.Max(line, Math.Max(generator.RateUp[cell], generator.RateDown[cell]));
    }

    private double LossUnder(double cap)
    {
        var equilibrium = Problem.Equilibrium.Values;
        var loss = 0.0;
        for (var cell = 0; cell < density.Length; cell++)
        {
            if (LargestFrom(cell) <= cap)
                continue;
            // From the upper cell of a steep edge: its large rate out, whose flux at equilibrium is that of the way back.
            loss += equilibrium[cell] * (Excess(generator.RateRight[cell], cap) + Excess(generator.RateLeft[cell], cap));
            if (generator.RateUp.Length > 0)
                loss += equilibrium[cell] * (Excess(generator.RateUp[cell], cap) + Excess(generator.RateDown[cell], cap));
        }

        return 4 * loss * highestRatio * Problem.Grid.CellVolume;
    }

    private static double Excess(double rate, double cap) => Math.Max(0, rate - cap);
}
