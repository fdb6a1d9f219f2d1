using System.Runtime.CompilerServices;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Problems;
using FlowSolver.Schemes.Splitting;

namespace FlowSolver.Ensembles;

/// <summary>
/// A sampler whose step is a recipe of maps and Gaussian noise. The scheme that runs the same recipe on the grid carries exactly its law, so that the
/// two may differ by sampling noise only.
/// </summary>
/// <remarks>
/// Walls: noise and explicit moves are reflected; proximal points and characteristics stop at a wall that V pushes into. Circles wrap.
/// Refused: potentials with jumps in one dimension, which no gradient sees.
/// </remarks>
public abstract class RecipeSampler : Sampler
{
    /// <summary>The step.</summary>
    public abstract SplitRecipe Recipe { get; }

    /// <inheritdoc/>
    /// <exception cref="InputException">V has a jump, or the start cannot be drawn.</exception>
    public override EnsembleRun Begin(Problem problem, int walkers, ulong seed, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(problem);
        RefuseJumps(problem, Traits.Name);
        return new RecipeRun(Recipe, problem, walkers, seed, team);
    }

    internal static void RefuseJumps(Problem problem, string sampler)
    {
        if (problem.Dimension != 1 || problem.Potential.IsSmooth)
            return;
        foreach (var kink in problem.Potential.FindKinks(problem.Domain.X))
        {
            if (kink.Jump != 0)
            {
                throw new InputException(new InputFault(
                    FormattableString.Invariant($"The potential jumps by {kink.Jump} at x = {kink.Position}; the sampler {sampler} follows derivatives and cannot see a jump."),
                    "Replace the jump by a steep slope, or leave the sampler out.", Key: "energy.potential"));
            }
        }
    }
}

/// <summary>Runs a recipe.</summary>
internal sealed class RecipeRun : TiledRun
{
    private readonly SplitPart[] parts;
    private readonly ProximalMap? proximal;
    private readonly CharacteristicMap? characteristic;
    private readonly BlowUpWatch watch;
    private readonly double[] deviations;
    private readonly double[] times;
    private readonly double longestExplicit;
    private double warnedStep = double.NaN;

    public RecipeRun(SplitRecipe recipe, Problem problem, int walkers, ulong seed, WorkerTeam team, int tilesInBlock = 32)
        : base(problem, walkers, seed, team, tilesInBlock)
    {
        parts = [.. recipe.Parts];
        deviations = new double[parts.Length];
        times = new double[parts.Length];
        foreach (var part in parts)
        {
            if (part.Map == TransportMap.Proximal)
                proximal ??= new ProximalMap(problem.Potential, problem.Domain);
            if (part.Map == TransportMap.Characteristic)
                characteristic ??= new CharacteristicMap(problem.Potential, problem.Domain);
            if (part.Map == TransportMap.Gradient)
                longestExplicit = Math.Max(longestExplicit, part.Fraction);
        }

        watch = new BlowUpWatch(problem, longestExplicit > 0 && problem.Potential.IsSmooth ? CurvatureSurvey.Of(problem.Potential, problem.Domain) : null);
    }

    protected override EnsembleReport AdvanceCore(double step)
    {
        for (var p = 0; p < parts.Length; p++)
        {
            times[p] = Problem.Mobility * parts[p].Fraction * step;
            deviations[p] = Math.Sqrt(2 * Problem.Temperature * times[p]);
            if (parts[p].Map == TransportMap.Characteristic)
                characteristic!.Prepare(times[p]);
        }

        var outcomes = RunTiles();
        var (failure, warning) = watch.Judge(outcomes, StepsTaken + 1, step, Problem.Mobility * longestExplicit * step, X, Y);
        return new EnsembleReport(failure, warning ?? StepWarning(step));
    }

    // Said once for each length of step.
    private string? StepWarning(double step)
    {
        if (step == warnedStep)
            return null;
        warnedStep = step;
        double longestProximal = 0, flowError = 0;
        for (var p = 0; p < parts.Length; p++)
        {
            longestProximal = parts[p].Map == TransportMap.Proximal ? Math.Max(longestProximal, times[p]) : longestProximal;
            flowError = parts[p].Map == TransportMap.Characteristic ? Math.Max(flowError, characteristic!.ErrorFor(times[p])) : flowError;
        }

        if (proximal is not null && !proximal.IsUnique(longestProximal))
        {
            return FormattableString.Invariant(
                $"The proximal step of {longestProximal:g4} is too long for a unique minimiser: times the least curvature of V, {proximal.LeastCurvature:g4}, it must stay above -1. The minimiser found may not be the lowest.");
        }

        return flowError <= 1e-6 * Problem.Domain.X.Length
            ? null
            : FormattableString.Invariant($"The flow of the gradient over a step is known to {flowError:g2} only: V has kinks that it crosses, or is too steep for {CharacteristicMap.MostSubsteps} substeps.");
    }

    [SkipLocalsInit]
    protected override void AdvanceTile(int first, int count, Span<double> x, Span<double> y, bool compare, ref BlockOutcome outcome)
    {
        var storage = AlignedScratch.Of(stackalloc double[2 * TileLength + AlignedScratch.Slack], 2 * TileLength);
        var gradientX = storage[..x.Length];
        var gradientY = IsPlane ? storage.Slice(TileLength, x.Length) : [];
        for (var p = 0; p < parts.Length; p++)
        {
            switch (parts[p].Map)
            {
                case null:
                    AddNoise(FoldX, deviations[p], StreamPurpose.Noise + 2 * (uint)p, first, x);
                    if (IsPlane)
                        AddNoise(FoldY, deviations[p], StreamPurpose.Noise + 2 * (uint)p + 1, first, y);
                    break;
                case TransportMap.Gradient:
                    Problem.Potential.Gradient(x, y, gradientX, gradientY);
                    if (compare)
                        CompareEnergies(times[p], count, x, y, gradientX, gradientY, ref outcome);
                    // An explicit move and the noise after it are one pass: the fold in between would not change the law.
                    var noisy = p + 1 < parts.Length && parts[p + 1].Map is null;
                    var deviation = noisy ? deviations[p + 1] : 0;
                    var purpose = StreamPurpose.Noise + 2 * (uint)(p + 1);
                    Move(FoldX, times[p], gradientX, deviation, purpose, x, first, count, ref outcome);
                    if (IsPlane)
                        Move(FoldY, times[p], gradientY, deviation, purpose + 1, y, first, count, ref outcome);
                    if (noisy)
                        p++;
                    break;
                case TransportMap.Proximal:
                    NoteMissed(proximal!.Apply(times[p], x, y, x, y), first, count, ref outcome);
                    break;
                default:
                    NoteMissed(characteristic!.Apply(times[p], x, y, x, y), first, count, ref outcome);
                    break;
            }
        }
    }

    private static void NoteMissed(int missed, int first, int count, ref BlockOutcome outcome)
    {
        if (missed == 0)
            return;
        if (outcome.Missed == 0)
            outcome.FirstMissed = first;
        outcome.Missed += Math.Min(missed, count);
    }
}
