using FlowSolver.Diagnostics;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Schemes.Splitting;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>What a bound is a bound on.</summary>
public enum BoundTarget
{
    /// <summary>W2 between the method's density and equilibrium.</summary>
    Equilibrium,

    /// <summary>W2 between the method's density and the exact flow at the same time.</summary>
    ExactFlow,
}

/// <summary>A bound along a run, or the reason why there is none.</summary>
/// <param name="Name">Short name, such as <c>ula-first-order</c>.</param>
/// <param name="Method">The scheme or the samplers whose density it is about, by the scheme's name in the catalogue.</param>
/// <param name="Target">What the distance is to.</param>
/// <param name="Statement">The inequality in symbols.</param>
/// <param name="Source">Published source, or "derived" with what it rests on.</param>
/// <param name="Assumptions">What it assumes, with the values found on this case.</param>
/// <param name="NotDrawnBecause">Why there are no values; null when there are.</param>
/// <param name="Times">Times of the steps, from 0; empty when not drawn.</param>
/// <param name="Squares">Bounds on W2² at these times.</param>
/// <param name="Bends">For each time what bends the bound on W2² in the step that led there; empty for none.</param>
public sealed record BoundCurve(
    string Name, string Method, BoundTarget Target, string Statement, string Source, string Assumptions, string? NotDrawnBecause,
    IReadOnlyList<double> Times, IReadOnlyList<double> Squares, IReadOnlyList<double> Bends)
{
    /// <summary>The bound on W2 after step <paramref name="step"/>; 0 is the start.</summary>
    public double AtStep(int step) => Math.Sqrt(Math.Max(0, Squares[step]));

    /// <summary>
    /// The bound on W2 at any time of the run, for the density that goes over linearly from one step's to the next, (1 − s)ρₖ₋₁ + sρₖ: W2² is convex in it, so that the bounds on W2² go over linearly too; where
    /// the exact flow goes on during the step, s(1 − s) times the bend comes on top.
    /// </summary>
    /// <exception cref="ArgumentOutOfRangeException">The bound is not drawn or the time outside the run.</exception>
    public double At(double time)
    {
        if (Times.Count == 0 || !(time >= Times[0] && time <= Times[^1]))
            throw new ArgumentOutOfRangeException(nameof(time), FormattableString.Invariant($"time was {time}; it must be a time of a bound that is drawn."));
        var step = 1;
        while (step < Times.Count - 1 && Times[step] < time)
            step++;
        if (Times.Count == 1)
            return AtStep(0);
        var s = (time - Times[step - 1]) / (Times[step] - Times[step - 1]);
        var square = (1 - s) * Squares[step - 1] + s * Squares[step] + (Bends.Count > 0 ? s * (1 - s) * Math.Max(0, Bends[step]) : 0);
        return Math.Sqrt(Math.Max(0, square));
    }
}

/// <summary>
/// Bounds to be drawn beside measured errors: non-asymptotic W2 bounds for ULA, proximal ULA and the implicit chain, contraction and error estimates of the JKO steps and the exact flow, and an
/// a-posteriori bound for proximal splitting. Each is drawn only if its assumptions hold on the case.
/// </summary>
/// <remarks>
/// Least and largest curvature are read from second derivatives sampled over the domain (<see cref="Inspection"/>): a picture, not a proof. The bounds are statements about the whole space; they are drawn only where
/// walls hold less than 1e-6 of the mass.
/// </remarks>
public static class ErrorBounds
{
    private const double MostWallMass = 1e-6;
    private const string DalalyanKaragulyan = "A. Dalalyan, A. Karagulyan, Stoch. Proc. Appl. 129 (2019) 5278-5311 (from memory)";
    private const string Durmus = "A. Durmus, S. Majewski, B. Miasojedow, J. Mach. Learn. Res. 20(73) (2019) 1-46";
    private const string GradientFlows = "L. Ambrosio, N. Gigli, G. Savaré, Gradient Flows, 2nd ed. 2008, Theorem 4.0.4 (from memory)";

    /// <summary>All bounds of a case.</summary>
    /// <param name="problem">The problem on its grid.</param>
    /// <param name="start">Density at time 0, on the same grid.</param>
    /// <param name="plan">Steps.</param>
    /// <param name="team">Threads.</param>
    /// <param name="cancellation">Stops the runs that some bounds need.</param>
    public static IReadOnlyList<BoundCurve> Of(GridProblem problem, Density start, TimePlan plan, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(problem);
        ArgumentNullException.ThrowIfNull(start);
        ArgumentNullException.ThrowIfNull(plan);
        ArgumentNullException.ThrowIfNull(team);
        var given = new Case(problem, start, plan, team, cancellation);
        return
        [
            given.Contraction("exact-contraction", "exact", "W2(t) ≤ e^(−mt) W2(0)", "D. Bakry, M. Émery, Lect. Notes Math. 1123 (1985) 177-206 (from memory)", BoundSteps.ExactFlow, needsSmoothness: false),
            given.Contraction("jko-contraction", "jko", "W2² ≤ (1 + 2mγ)^(−n) W2(0)²", GradientFlows, BoundSteps.Jko, needsSmoothness: false),
            given.Contraction("ula-first-order", "split-gradient", "W2 ≤ (1 − mγ)^n W2(0) + 1.65 (L/m) √(γd)", DalalyanKaragulyan, BoundSteps.UlaFirstOrder, "γ < 2/L"),
            given.SecondOrder(),
            given.Contraction("ula-optimisation", "split-gradient", "W2 ≤ (1 − mγ)^n W2(0) + 1.82 (L/m) √(γd)", "A. Dalalyan, Proc. Mach. Learn. Res. 65 (2017) 678-689 (from memory)", BoundSteps.UlaOptimisation, "γ ≤ 2/(m + L)"),
            given.Contraction("ula-convex-optimisation", "split-gradient", "W2² ≤ (1 − mγ)^n W2(0)² + 2γLd/m", Durmus + " (from memory)", BoundSteps.UlaConvexOptimisation, "γ ≤ 1/L"),
            given.Moments(),
            given.Contraction("proximal-convex-optimisation", "split-proximal", "W2² ≤ (1 + mγ)^(−n) W2(0)² + 2γLd/m", "derived after " + Durmus, BoundSteps.ProximalConvexOptimisation),
            given.Contraction("implicit-convex-optimisation", "split-noise-proximal", "W2² ≤ (1 + 2mγ)^(−n) W2(0)² + (d/m) log(1 + γL)", "derived after " + Durmus, BoundSteps.ImplicitConvexOptimisation),
            given.Contraction("proximal-coupling", "split-proximal", "W2 ≤ (1 + mγ)^(−n) W2(0) + ((1 + mγ)/m) L√(γd)(2√2/3 + (3/2)√(γL))", "derived: synchronous coupling with the stationary diffusion", BoundSteps.ProximalCoupling),
            .. given.JkoErrors(),
            given.Posterior(),
        ];
    }

    private sealed class Case
    {
        private readonly GridProblem problem;
        private readonly Density start;
        private readonly WorkerTeam team;
        private readonly CancellationToken cancellation;
        private readonly ConvexityConstants constants;
        private readonly double startDistance;
        private readonly string values;
        private readonly string? notOnWholeSpace;
        private readonly double[] times;

        public Case(GridProblem problem, Density start, TimePlan plan, WorkerTeam team, CancellationToken cancellation)
        {
            (this.problem, this.start, this.team, this.cancellation) = (problem, start, team, cancellation);
            var inspection = Inspection.Of(problem.Problem, problem.Grid, plan, 0);
            var temperature = problem.Problem.Temperature;
            constants = new ConvexityConstants(inspection.LeastCurvature / temperature, inspection.LargestCurvature / temperature, problem.Grid.Dimension);
            values = FormattableString.Invariant($"m = {constants.Convexity:g4} and L = {constants.Smoothness:g4} per temperature, sampled over the domain; γ = MTτ");
            notOnWholeSpace = problem.Grid.X.IsPeriodic || problem.Grid.Y is { IsPeriodic: true } ? "The domain has a periodic axis; the bound is about the whole space."
                : inspection.EquilibriumWallMass > MostWallMass || inspection.StartWallMass > MostWallMass
                    ? FormattableString.Invariant($"The cells at the walls hold a share of {Math.Max(inspection.EquilibriumWallMass, inspection.StartWallMass):g2} of the mass at the start or at equilibrium; the bound is about the whole space and needs less than {MostWallMass:g1}.")
                    : null;
            startDistance = DensityDistance.Between(start, problem.Equilibrium, team)?.High ?? double.NaN;
            var list = new List<double> { 0 };
            for (var report = 1; report < plan.ReportTimes.Count; report++)
            {
                for (var k = 0; k < plan.StepsBefore(report); k++)
                    list.Add(list[^1] + plan.StepLengthBefore(report));
            }

            times = [.. list];
        }

        private double Gamma(int step) => problem.Problem.Mobility * problem.Problem.Temperature * (times[step] - times[step - 1]);

        private string? WhyNot(bool needsSmoothness, bool needsStrictConvexity = true)
            => notOnWholeSpace
                ?? (needsSmoothness && !problem.Problem.Potential.IsSmooth ? "V has kinks: its gradient is not Lipschitz." : null)
                ?? (needsStrictConvexity && !(constants.Convexity > 0) ? FormattableString.Invariant($"V is not strictly convex on the domain: the least curvature found is {constants.Convexity * problem.Problem.Temperature:g4}.") : null)
                ?? (!needsStrictConvexity && !(constants.Convexity >= 0) ? FormattableString.Invariant($"V is not convex on the domain: the least curvature found is {constants.Convexity * problem.Problem.Temperature:g4}.") : null)
                ?? (double.IsNaN(startDistance) ? "The distance of the start to equilibrium could not be computed." : null);

        private BoundCurve Curve(
            string name, string method, BoundTarget target, string statement, string source, string assumptions, string? whyNot, double[]? squares = null, double[]? bends = null)
            => new(name, method, target, statement, source, $"{assumptions}; {values}", whyNot, whyNot is null ? times : [], whyNot is null ? squares ?? [] : [], whyNot is null ? bends ?? [] : []);

        public BoundCurve Contraction(
            string name, string method, string statement, string source, Func<ConvexityConstants, double, double, double> step, string condition = "any γ", bool needsSmoothness = true)
            => Contraction(name, method, statement, source, step, condition, needsSmoothness, constants, null);

        private BoundCurve Contraction(
            string name, string method, string statement, string source, Func<ConvexityConstants, double, double, double> step, string condition, bool needsSmoothness, ConvexityConstants with, string? also)
        {
            var assumptions = needsSmoothness ? $"m-convex V with L-Lipschitz gradient, {condition}" : $"m-convex V, {condition}";
            var whyNot = WhyNot(needsSmoothness) ?? also;
            var squares = new double[times.Length];
            var distance = startDistance;
            squares[0] = distance * distance;
            for (var k = 1; k < times.Length && whyNot is null; k++)
            {
                distance = step(with, Gamma(k), distance);
                squares[k] = distance * distance;
                if (double.IsNaN(distance))
                    whyNot = FormattableString.Invariant($"The step is too long: γ = {Gamma(k):g4} and the bound needs {condition} (2/(m + L) = {2 / (with.Convexity + with.Smoothness):g4}, 1/L = {1 / with.Smoothness:g4}).");
            }

            return Curve(name, method, BoundTarget.Equilibrium, statement, source, assumptions, whyNot, squares);
        }

        public BoundCurve SecondOrder()
        {
            var lipschitz = HessianLipschitz() / problem.Problem.Temperature;
            return Contraction("ula-second-order", "split-gradient", "W2 ≤ (1 − mγ)^n W2(0) + M₂γd/(2m) + 11Lγ√(Ld)/(5m)", DalalyanKaragulyan, BoundSteps.UlaSecondOrder,
                FormattableString.Invariant($"D²V Lipschitz (M₂ = {lipschitz:g4} per temperature, from differences), γ ≤ 2/(m + L)"), true,
                constants with { HessianLipschitz = lipschitz }, double.IsFinite(lipschitz) ? null : "The second derivatives of V are not finite everywhere.");
        }

        public BoundCurve Moments()
        {
            const string statement = "W2² ≤ a(E|x − x*|² + d/m) + b";
            var whyNot = WhyNot(true);
            var squares = new double[times.Length];
            var pair = (Memory: 2.0, Bias: 0.0);
            var spread = whyNot is null ? SpreadAroundMinimum() + constants.Dimension / constants.Convexity : 0;
            for (var k = 0; k < times.Length && whyNot is null; k++)
            {
                if (k > 0)
                    pair = BoundSteps.UlaMoments(constants, Gamma(k), pair);
                squares[k] = pair.Memory * spread + pair.Bias;
                if (double.IsNaN(squares[k]))
                    whyNot = FormattableString.Invariant($"The step is too long: γ = {Gamma(k):g4} and the bound needs γ ≤ 1/(m + L) = {1 / (constants.Convexity + constants.Smoothness):g4}.");
                else if (k > 1 && Gamma(k) > Gamma(k - 1) * (1 + 1e-9))
                    whyNot = "The steps grow; the bound needs steps that do not.";
            }

            return Curve("ula-moments", "split-gradient", BoundTarget.Equilibrium, statement, "A. Durmus, É. Moulines, Bernoulli 25 (2019) 2854-2882, Theorem 5 (from memory); any start by convexity of W2²",
                "m-convex V with L-Lipschitz gradient, γ ≤ 1/(m + L), steps that do not grow", whyNot, squares);
        }

        public IEnumerable<BoundCurve> JkoErrors()
        {
            const string finite = "W2(exact, JKO)² ≤ Mτ(F(ρ₀) − F_τ(ρ₀))";
            const string steep = "W2(exact, JKO) ≤ Mτ|∂F|(ρ₀)/√2";
            var whyNot = WhyNot(false, needsStrictConvexity: false);
            var uneven = Enumerable.Range(1, times.Length - 1).Any(k => Math.Abs(times[k] - times[k - 1] - times[1]) > 1e-9 * times[1])
                ? "The steps are not equal." : null;
            var scheme = SchemeCatalogue.Find("jko");
            var step = times.Length > 1 ? times[1] : 0;
            var mobility = problem.Problem.Mobility;
            var whyNoStep = whyNot ?? uneven ?? (scheme is null || !scheme.Traits.Dimensions.Contains(problem.Grid.Dimension) ? "There is no JKO step in this dimension." : null);
            var square = double.NaN;
            if (whyNoStep is null && times.Length > 1)
            {
                using var run = scheme!.Begin(problem, start, team);
                var report = run.Advance(step);
                var after = run.Snapshot();
                whyNoStep = report.Failure ?? (Array.TrueForAll(after.Values, double.IsFinite) ? null : "The first step gave no density.");
                if (whyNoStep is null)
                {
                    // The lower bound of the distance makes the bound on the error the larger.
                    var moved = DensityDistance.Between(start, after, team)?.Low ?? double.NaN;
                    square = BoundSteps.JkoFiniteEnergySquare(mobility, step, problem.FreeEnergy(start.Values), problem.FreeEnergy(after.Values), moved);
                    whyNoStep = double.IsNaN(square) ? "The first step's distance could not be computed." : null;
                }
            }

            yield return Curve("jko-finite-energy", "jko", BoundTarget.ExactFlow, finite, GradientFlows, "convex V, equal steps", whyNoStep, Constant(square));
            var slope = problem.Problem.Temperature * Math.Sqrt(Math.Max(0, FisherInformation.Of(new Generator(problem, team), start.Values)));
            var whyNoSlope = whyNot ?? uneven ?? (double.IsFinite(slope) ? null : "The start has no finite slope.");
            yield return Curve("jko-finite-slope", "jko", BoundTarget.ExactFlow, steep, GradientFlows, "convex V, equal steps, start with finite relative Fisher information", whyNoSlope,
                Constant(BoundSteps.JkoFiniteSlopeSquare(mobility, step, slope)));

            double[] Constant(double value)
            {
                var squares = new double[times.Length];
                squares.AsSpan(1).Fill(value);
                return squares;
            }
        }

        public BoundCurve Posterior()
        {
            const string statement = "W2² ≤ Σ Mτ[F(ρₖ₋₁) − F(ρₖ)] + 2Mτ[E(ρₖ) − E(Pρₖ₋₁)]";
            const string source = "derived after R. Nochetto, G. Savaré, C. Verdi, Comm. Pure Appl. Math. 53 (2000) 525-589, and L. Ambrosio, N. Gigli, G. Savaré, Gradient Flows, 2nd ed. 2008";
            var whyNot = WhyNot(false, needsStrictConvexity: false);
            var squares = new double[times.Length];
            var bends = new double[times.Length];
            if (whyNot is null)
            {
                using var run = SplittingScheme.Proximal.Begin(problem, start, team);
                var bound = new PosteriorBound(problem.Problem.Mobility, problem.FreeEnergy(start.Values));
                var before = (double[])start.Values.Clone();
                var after = new double[before.Length];
                var (mappedStep, mapped) = (double.NaN, Array.Empty<double>());
                for (var k = 1; k < times.Length && whyNot is null; k++)
                {
                    cancellation.ThrowIfCancellationRequested();
                    var step = times[k] - times[k - 1];
                    if (!(Math.Abs(step - mappedStep) <= 1e-9 * step))
                        (mappedStep, mapped) = (step, EnergyOfImages(step));
                    whyNot = run.Advance(step).Failure;
                    run.WriteDensity(after);
                    bound.Add(step, problem.FreeEnergy(after), SpanKernels.Dot(before, mapped) * problem.Grid.CellVolume, problem.PotentialEnergy(after));
                    (squares[k], bends[k]) = (bound.Square, bound.Bend);
                    (before, after) = (after, before);
                }
            }

            return Curve("split-posterior", "split-proximal", BoundTarget.ExactFlow, statement, source, "convex V", whyNot, squares, bends);
        }

        // V at the proximal point of each cell centre.
        private double[] EnergyOfImages(double step)
        {
            var grid = problem.Grid;
            var potential = problem.Problem.Potential;
            var separated = grid.Y is null ? null : LandscapeOnLine.Separate(potential, grid.X.Interval, grid.Y.Interval);
            var maps = new MapsOnGrid(potential, separated, grid.X, grid.Y, [new TransportLeg(TransportMap.Proximal, problem.Problem.Mobility * step)]);
            var x = new double[grid.CellCount];
            var y = new double[grid.Y is null ? 0 : grid.CellCount];
            maps.Map(grid.X.Centers(), grid.Y?.Centers() ?? [], x, y, team);
            var energy = new double[grid.CellCount];
            potential.Value(x, y, energy);
            return energy;
        }

        // E|x − x*|² from above: the minimum lies within half a cell's diagonal of the lowest centre, or of a neighbour; a whole diagonal is allowed.
        private double SpreadAroundMinimum()
        {
            var grid = problem.Grid;
            var lowest = Array.IndexOf(problem.CellPotential, problem.LeastPotential);
            var (x, y) = (grid.X.Center(lowest % grid.Nx), grid.Y?.Center(lowest / grid.Nx) ?? 0);
            var sum = 0.0;
            for (var cell = 0; cell < grid.CellCount; cell++)
            {
                var (dx, dy) = (grid.X.Center(cell % grid.Nx) - x, (grid.Y?.Center(cell / grid.Nx) ?? 0) - y);
                sum += start.Values[cell] * (dx * dx + dy * dy);
            }

            var margin = Math.Sqrt(grid.X.Width * grid.X.Width + (grid.Y is null ? 0 : grid.Y.Width * grid.Y.Width));
            return Math.Pow(Math.Sqrt(sum * grid.CellVolume) + margin, 2);
        }

        // sup over unit v of the operator norm of the derivative of D²V along v, from above: √(|∂ₓD²V|² + |∂ᵧD²V|²), by differences between neighbours on a sampling grid.
        private double HessianLipschitz()
        {
            var (domain, plane) = (problem.Problem.Domain, problem.Grid.Y is not null);
            var (columns, rows) = plane ? (128, 128) : (4096, 1);
            var hessian = new double[3][];
            for (var k = 0; k < 3; k++)
                hessian[k] = new double[columns * rows];
            var (x, y) = (new double[columns], new double[plane ? columns : 0]);
            var (value, gx, gy) = (new double[columns], new double[columns], new double[y.Length]);
            for (var row = 0; row < rows; row++)
            {
                for (var i = 0; i < columns; i++)
                    x[i] = domain.X.From + (i + 0.5) / columns * domain.X.Length;
                if (plane)
                    Array.Fill(y, domain.Y!.From + (row + 0.5) / rows * domain.Y.Length);
                problem.Problem.Potential.Jet(x, y, new PotentialJet
                {
                    Value = value,
                    GradientX = gx,
                    GradientY = gy,
                    HessianXX = hessian[0].AsSpan(row * columns, columns),
                    HessianXY = plane ? hessian[1].AsSpan(row * columns, columns) : [],
                    HessianYY = plane ? hessian[2].AsSpan(row * columns, columns) : [],
                });
            }

            var largest = 0.0;
            var (spacingX, spacingY) = (domain.X.Length / columns, plane ? domain.Y!.Length / rows : 1);
            for (var row = 0; row < rows - (plane ? 1 : 0); row++)
            {
                for (var i = 0; i + 1 < columns; i++)
                {
                    var at = row * columns + i;
                    var along = Norm(at + 1, at) / spacingX;
                    var across = plane ? Norm(at + columns, at) / spacingY : 0;
                    var norm = Math.Sqrt(along * along + across * across);
                    if (double.IsNaN(norm))
                        return double.NaN;
                    largest = Math.Max(largest, norm);
                }
            }

            return largest;

            double Norm(int a, int b)
            {
                var (xx, xy, yy) = (hessian[0][a] - hessian[0][b], hessian[1][a] - hessian[1][b], hessian[2][a] - hessian[2][b]);
                return Math.Abs(0.5 * (xx + yy)) + Math.Sqrt(0.25 * (xx - yy) * (xx - yy) + xy * xy);
            }
        }
    }
}
