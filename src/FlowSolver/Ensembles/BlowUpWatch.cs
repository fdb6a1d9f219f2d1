using System.Globalization;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>What one block of walkers saw in a step. Blocks are gathered in order, so that the report does not depend on threads.</summary>
internal struct BlockOutcome
{
    /// <summary>Walkers whose move was not finite or spanned the domain.</summary>
    public int Thrown;

    /// <summary>Index of the first of them; valid when there are any.</summary>
    public int FirstThrown;

    /// <summary>Walkers whose energy before and after the deterministic part was compared.</summary>
    public int Compared;

    /// <summary>Sum over them of the change of V.</summary>
    public double EnergyChange;

    /// <summary>Sum over them of its square.</summary>
    public double EnergyChangeSquared;

    /// <summary>Walkers whose implicit step or flow missed its tolerance.</summary>
    public int Missed;

    /// <summary>Index of the first of them; valid when there are any.</summary>
    public int FirstMissed;

    /// <summary>Proposals accepted.</summary>
    public int Accepted;
}

/// <summary>
/// Tells a blow-up of the explicit step from an ordinary one, before anything is infinite.
/// </summary>
/// <remarks>
/// <para>Thrown: −t∇V is not finite, or is longer than the domain along an axis with walls. With walls an exploding walker is reflected and never
/// leaves, so that its position alone would not give it away.</para>
/// <para>Heating: on average over the walkers compared, the deterministic part raises V, three steps in a row, by more than a hundredth of T and
/// more than three standard errors. Descent lowers V wherever t·L &lt; 2 (L the curvature on the way); above that walkers in a valley climb,
/// however far the walls are. One tile in each block is compared in each step, in turn.</para>
/// </remarks>
internal sealed class BlowUpWatch(Problem problem, CurvatureSurvey? survey)
{
    private const int RisesThatFail = 3;
    private const int LeastCompared = 16;
    private int rises;
    private double warnedStep = double.NaN;

    /// <summary>Gathers a step.</summary>
    /// <param name="outcomes">One a block.</param>
    /// <param name="stepNumber">From 1.</param>
    /// <param name="timeStep">τ.</param>
    /// <param name="explicitTime">Mobility times the longest explicit substep; 0 when there is none.</param>
    /// <param name="x">Walkers, with those thrown still where they were.</param>
    /// <param name="y">Walkers; empty in one dimension.</param>
    /// <returns>A sentence for a failure and one for a warning; null where there is none.</returns>
    public (string? Failure, string? Warning) Judge(
        ReadOnlySpan<BlockOutcome> outcomes, int stepNumber, double timeStep, double explicitTime, ReadOnlySpan<double> x, ReadOnlySpan<double> y)
    {
        int thrown = 0, firstThrown = -1, compared = 0, missed = 0, firstMissed = -1;
        double change = 0, squared = 0;
        foreach (ref readonly var outcome in outcomes)
        {
            if (outcome.Thrown > 0 && thrown == 0)
                firstThrown = outcome.FirstThrown;
            if (outcome.Missed > 0 && missed == 0)
                firstMissed = outcome.FirstMissed;
            thrown += outcome.Thrown;
            missed += outcome.Missed;
            compared += outcome.Compared;
            change += outcome.EnergyChange;
            squared += outcome.EnergyChangeSquared;
        }

        if (thrown > 0)
        {
            return (string.Create(CultureInfo.InvariantCulture,
                $"The explicit step blew up at step {stepNumber}: {thrown} of {x.Length} walkers were sent a whole domain's length or to a value that is not finite, the first one from {Place(x, y, firstThrown)}{CurvatureThere(explicitTime, x[firstThrown], y.Length > 0 ? y[firstThrown] : 0)}. Use a shorter step or a proximal sampler."), null);
        }

        if (missed > 0)
        {
            return (string.Create(CultureInfo.InvariantCulture,
                $"The implicit part of step {stepNumber} missed its tolerance for {missed} of {x.Length} walkers, the first one now at {Place(x, y, firstMissed)}. Use a shorter step, or look at the potential there."), null);
        }

        if (explicitTime > 0 && IsHeating(compared, change, squared))
        {
            return (string.Create(CultureInfo.InvariantCulture,
                $"The explicit step blew up at step {stepNumber}: for {RisesThatFail} steps the gradient part has raised the mean energy of {x.Length} walkers, by {change / compared:g3} now; the step times the largest curvature of V, {explicitTime:g4} x {survey?.Largest ?? 0:g4} near {Place(survey)}, must stay below 2. Use a shorter step or a proximal sampler."), null);
        }

        return (null, explicitTime > 0 ? StabilityWarning(timeStep, explicitTime) : null);
    }

    private bool IsHeating(int compared, double change, double squared)
    {
        if (compared < LeastCompared)
            return false;
        var mean = change / compared;
        var variance = Math.Max(0, squared / compared - mean * mean);
        rises = mean > 0.01 * problem.Temperature && mean > 3 * Math.Sqrt(variance / compared) ? rises + 1 : 0;
        return rises >= RisesThatFail;
    }

    // Once for each length of step.
    private string? StabilityWarning(double timeStep, double explicitTime)
    {
        if (survey is null || timeStep == warnedStep)
            return null;
        warnedStep = timeStep;
        return explicitTime * survey.Largest <= 2
            ? null
            : string.Create(CultureInfo.InvariantCulture,
                $"The step times the curvature of V is {explicitTime * survey.Largest:g4} near {Place(survey)}; above 2 the explicit step overshoots, for walkers that come there.");
    }

    private string CurvatureThere(double explicitTime, double x, double y)
    {
        var value = new double[1];
        var two = problem.Dimension == 2;
        double[] gx = [0], gy = two ? [0] : [], hxx = [0], hxy = two ? [0] : [], hyy = two ? [0] : [];
        problem.Potential.Jet([x], two ? [y] : [], new PotentialJet { Value = value, GradientX = gx, GradientY = gy, HessianXX = hxx, HessianXY = hxy, HessianYY = hyy });
        var radius = two ? Math.Sqrt(0.25 * (hxx[0] - hyy[0]) * (hxx[0] - hyy[0]) + hxy[0] * hxy[0]) : 0;
        var curvature = two ? 0.5 * (hxx[0] + hyy[0]) + radius : hxx[0];
        return explicitTime > 0 && double.IsFinite(curvature)
            ? string.Create(CultureInfo.InvariantCulture, $", where the step times the curvature of V is {explicitTime * curvature:g4} (it must stay below 2)")
            : "";
    }

    private static string Place(ReadOnlySpan<double> x, ReadOnlySpan<double> y, int index) => y.Length > 0
        ? string.Create(CultureInfo.InvariantCulture, $"x = {x[index]:g6}, y = {y[index]:g6}")
        : string.Create(CultureInfo.InvariantCulture, $"x = {x[index]:g6}");

    private string Place(CurvatureSurvey? found) => found is null ? "" : problem.Dimension == 2
        ? string.Create(CultureInfo.InvariantCulture, $"x = {found.LargestAtX:g4}, y = {found.LargestAtY:g4}")
        : string.Create(CultureInfo.InvariantCulture, $"x = {found.LargestAtX:g4}");
}
