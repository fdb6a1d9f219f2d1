using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// Operator splitting: a step is a <see cref="SplitRecipe"/> of transport along −∇V and Gaussian noise, carried out on the density. It is at once the law of
/// the sampler that applies the same recipe to each walker.
/// </summary>
/// <remarks>
/// <para>
/// Update. Transport by a map P (<see cref="TransportMap"/>) for t = M·fraction·τ and noise for s = M·fraction·τ together are
/// ρ′(y) = ∫ρ(x) G(y − P(x)) dx, G the normal density of variance 2Ts on each axis, mirrored at walls and wrapped on circles. The integral is taken as
/// it stands: the mass of each cell is carried to its true image and spread from there (<c>GaussianSpreading</c>), so that nothing is moved to cell centres between transport and noise
/// and no grid diffusion adds up over short steps. Where a map has kinks (those of V, or walls that it moves) Gauss points between them replace the cell centres, and mass that lands on one
/// point, such as the kink of |x| under prox, is spread from that point. Walls reflect explicit maps and noise; proximal points are sought inside the walls and the flow of −∇V stops at one that V pushes into. Maps that meet across two steps are composed, noises that meet are added: both are exact.
/// </para>
/// <para>
/// Order in time: one for one map and one noise; two for noise/2, flow, noise/2 and flow/2, noise, flow/2 (G. Strang, SIAM J. Numer. Anal. 5 (1968) 506-517, from memory) and for explicit/2, noise, prox/2 and
/// its mirror, whose halves are adjoint to each other; one for symmetric recipes around or between proximal maps alone. In space the integral is accurate beyond all powers of h
/// for smooth V and ρ: order 2 is what the reading of a density as cell averages gives.
/// </para>
/// <para>
/// Kept exactly: mass (scaled by 1 + O(1e-9) where a density is rough), sign. Not kept: equilibrium, free energy. On V = λx²/2 the stationary variance over T/λ is, with z = MτΛ, Λ = λ:
/// gradient, noise 1/(1 − z/2); prox, noise (1 + z)²/(1 + z/2); noise, prox 1/(1 + z/2); flow, noise 2z/(1 − e^(−2z)); noise, flow 2z/(e^(2z) − 1); noise/2, flow, noise/2 z·coth z; flow/2, noise, flow/2 z/sinh z;
/// gradient/2, noise, prox/2 exactly 1; prox/2, noise, gradient/2 (1 − z²/4)²; noise/2, prox, noise/2 (1 + (1 + z)²)/(2 + z); prox/2, noise, prox/2 2z/((1 + z/2)² − (1 + z/2)^(−2)). Each follows from the recursion of the variance.
/// </para>
/// <para>
/// Cost: preparing the maps once a step length; then about 250 multiplications a cell in two dimensions, plus the convolution when the noise is wider than 1.7 cells.
/// Where the noise of a step is narrower than 1.07 cells the run works on cells 3, 5, 7, … times finer of its own, up to 4 million, and reports on the grid it was given.
/// Prefer it to the JKO step when the sampler's own law is wanted or steps must be cheap; prefer the exact flow when no step bias is wanted.
/// </para>
/// <para>
/// Source: splitting of the Wasserstein gradient flow into its potential and entropy parts, P. Clément, J. Maas, J. Evol. Equ. 11 (2011) 405-427; as laws of samplers, A. Durmus, S. Majewski,
/// B. Miasojedow, J. Mach. Learn. Res. 20(73) (2019) 1-46. Departure: the two parts are merged into one integral.
/// </para>
/// </remarks>
public sealed class SplittingScheme : FlowScheme
{
    private const string ClementMaas = "P. Clément, J. Maas, J. Evol. Equ. 11 (2011) 405-427";
    private const string Strang = "G. Strang, SIAM J. Numer. Anal. 5 (1968) 506-517 (from memory)";
    private const string Durmus = "A. Durmus, S. Majewski, B. Miasojedow, J. Mach. Learn. Res. 20(73) (2019) 1-46";

    /// <summary>Makes a scheme of a recipe.</summary>
    /// <param name="name">Its name in tables.</param>
    /// <param name="summary">One sentence for the reader.</param>
    /// <param name="recipe">The step.</param>
    /// <param name="orderInTime">Order in τ on smooth problems.</param>
    /// <param name="source">Published source.</param>
    public SplittingScheme(string name, string summary, SplitRecipe recipe, int orderInTime, string source)
    {
        ArgumentNullException.ThrowIfNull(recipe);
        Recipe = recipe;
        Traits = new SchemeTraits(name, summary, Require.AtLeast(orderInTime, 1), 2, false, false, [1, 2], source);
    }

    /// <summary>prox, then noise: the law of the proximal unadjusted Langevin algorithm.</summary>
    public static SplittingScheme Proximal { get; } = new(
        "split-proximal", "Proximal step on the potential, then heat: the law of proximal ULA.", SplitRecipes.ProximalThenNoise, 1, ClementMaas);

    /// <summary>Gradient step, then noise: the law of the unadjusted Langevin algorithm.</summary>
    public static SplittingScheme Gradient { get; } = new(
        "split-gradient", "Explicit gradient step on the potential, then heat: the law of ULA.", SplitRecipes.GradientThenNoise, 1, Durmus);

    /// <summary>noise/2, flow, noise/2.</summary>
    public static SplittingScheme StrangNoiseFlowNoise { get; } = new(
        "split-strang", "Half the heat, the flow of −∇V, half the heat.", SplitRecipes.HalfNoiseFlowHalfNoise, 2, Strang);

    /// <summary>flow/2, noise, flow/2.</summary>
    public static SplittingScheme StrangFlowNoiseFlow { get; } = new(
        "split-strang-flow", "Half the flow of −∇V, heat, half the flow.", SplitRecipes.HalfFlowNoiseHalfFlow, 2, Strang);

    /// <summary>gradient/2, noise, prox/2.</summary>
    public static SplittingScheme Trapezoid { get; } = new(
        "split-trapezoid", "Half an explicit step, heat, half a proximal step: the stationary variance is exact on quadratic landscapes.",
        SplitRecipes.HalfGradientNoiseHalfProximal, 2, "Trapezoidal rule as a composition of adjoint Euler steps: E. Hairer, C. Lubich, G. Wanner, Geometric Numerical Integration, 2nd ed. 2006, §II.3 (from memory)");

    /// <summary>noise, then prox: the law of the implicit Euler chain.</summary>
    public static SplittingScheme NoiseThenProximal { get; } = new(
        "split-noise-proximal", "Heat, then a proximal step: the law of the implicit Euler chain.", SplitRecipes.NoiseThenProximal, 1, ClementMaas);

    /// <inheritdoc/>
    public override SchemeTraits Traits { get; }

    /// <summary>The step.</summary>
    public SplitRecipe Recipe { get; }

    /// <inheritdoc/>
    protected override FlowRun CreateRun(GridProblem problem, Density start, WorkerTeam team) => new SplittingRun(Recipe, problem, start, team);
}
