using FlowSolver.Foundation;

namespace FlowSolver.Studies;

/// <summary>What a landscape gives to the bounds, in units of temperature: U = V/T.</summary>
/// <param name="Convexity">m, the least curvature of U.</param>
/// <param name="Smoothness">L, the largest curvature of U.</param>
/// <param name="Dimension">d.</param>
/// <param name="HessianLipschitz">Lipschitz constant of D²U in the operator norm; NaN where it is not known.</param>
public readonly record struct ConvexityConstants(double Convexity, double Smoothness, int Dimension, double HessianLipschitz = double.NaN);

/// <summary>
/// One step of each bound on W2(law of a sampler, equilibrium), for a step γ = M·T·τ on U = V/T: what the bound after a step is, given the bound before. Iterated over equal steps they are the
/// published statements; as recursions they serve unequal steps too.
/// </summary>
/// <remarks>
/// Sources stand with the members. A member's remark "from memory" means that its constants were recalled and checked against several thousand Gaussian cases, not re-read.
/// </remarks>
public static class BoundSteps
{
    // 7√2/6.
    private const double UlaConstant = 1.6499158227686108;

    /// <summary>
    /// ULA: W′ = (1 − mγ)W + (7√2/6) Lγ√(γd) for γ ≤ 2/(m + L), W′ = (Lγ − 1)W + the same up to 2/L. A. Dalalyan, A. Karagulyan, Stoch. Proc. Appl. 129 (2019) 5278-5311, Theorem 1 (from memory).
    /// </summary>
    /// <returns>NaN where γ is too long.</returns>
    public static double UlaFirstOrder(ConvexityConstants u, double gamma, double distance)
    {
        var (m, l) = (u.Convexity, u.Smoothness);
        var noise = UlaConstant * l * gamma * Math.Sqrt(gamma * u.Dimension);
        return gamma <= 2 / (m + l) ? (1 - m * gamma) * distance + noise : gamma < 2 / l ? (l * gamma - 1) * distance + noise : double.NaN;
    }

    /// <summary>
    /// ULA with a Lipschitz Hessian: W′ = (1 − mγ)W + M₂γ²d/2 + (11/5)Lγ²√(Ld), γ ≤ 2/(m + L). The same paper's theorem for Lipschitz Hessians (from memory).
    /// </summary>
    /// <returns>NaN where γ is too long.</returns>
    public static double UlaSecondOrder(ConvexityConstants u, double gamma, double distance)
        => gamma <= 2 / (u.Convexity + u.Smoothness)
            ? (1 - u.Convexity * gamma) * distance + gamma * gamma * (0.5 * u.HessianLipschitz * u.Dimension + 2.2 * u.Smoothness * Math.Sqrt(u.Smoothness * u.Dimension))
            : double.NaN;

    /// <summary>ULA: W′ = (1 − mγ)W + 1.82 Lγ√(γd), γ ≤ 2/(m + L). A. Dalalyan, Proc. Mach. Learn. Res. 65 (2017) 678-689 (from memory).</summary>
    /// <returns>NaN where γ is too long.</returns>
    public static double UlaOptimisation(ConvexityConstants u, double gamma, double distance)
        => gamma <= 2 / (u.Convexity + u.Smoothness)
            ? (1 - u.Convexity * gamma) * distance + 1.82 * u.Smoothness * gamma * Math.Sqrt(gamma * u.Dimension)
            : double.NaN;

    /// <summary>
    /// ULA: W′² = (1 − mγ)W² + 2γ²Ld, γ ≤ 1/L. A. Durmus, S. Majewski, B. Miasojedow, J. Mach. Learn. Res. 20(73) (2019) 1-46 (from memory).
    /// </summary>
    /// <returns>NaN where γ is too long.</returns>
    public static double UlaConvexOptimisation(ConvexityConstants u, double gamma, double distance)
        => gamma <= 1 / u.Smoothness
            ? Math.Sqrt((1 - u.Convexity * gamma) * distance * distance + 2 * gamma * gamma * u.Smoothness * u.Dimension)
            : double.NaN;

    /// <summary>
    /// Proximal ULA: (1 + mγ)W′² = W² + 2γ²Ld, any γ. From three inequalities: prox, noise and the rise of the potential energy in the noise (derived for this project from L. Ambrosio, N. Gigli,
    /// G. Savaré, Gradient Flows, 2nd ed. 2008, and the argument of Durmus, Majewski, Miasojedow).
    /// </summary>
    public static double ProximalConvexOptimisation(ConvexityConstants u, double gamma, double distance)
        => Math.Sqrt((distance * distance + 2 * gamma * gamma * u.Smoothness * u.Dimension) / (1 + u.Convexity * gamma));

    /// <summary>Noise, then prox: (1 + 2mγ)W′² = W² + 2γd log(1 + γL), any γ. Derived as <see cref="ProximalConvexOptimisation"/>, with the loss of entropy under prox.</summary>
    public static double ImplicitConvexOptimisation(ConvexityConstants u, double gamma, double distance)
        => Math.Sqrt((distance * distance + 2 * gamma * u.Dimension * Math.Log(1 + gamma * u.Smoothness)) / (1 + 2 * u.Convexity * gamma));

    /// <summary>Proximal ULA by coupling with the diffusion under the same noise: W′ = W/(1 + mγ) + γL√(γd)(2√2/3 + (3/2)√(γL)), any γ (derived for this project).</summary>
    public static double ProximalCoupling(ConvexityConstants u, double gamma, double distance)
        => distance / (1 + u.Convexity * gamma)
            + gamma * u.Smoothness * Math.Sqrt(gamma * u.Dimension) * (2 * Math.Sqrt(2) / 3 + 1.5 * Math.Sqrt(gamma * u.Smoothness));

    /// <summary>JKO steps: (1 + 2mγ)W′² = W², any γ; no bias. From the evolution variational inequality (Ambrosio, Gigli, Savaré, Theorem 4.0.4, from memory).</summary>
    public static double Jko(ConvexityConstants u, double gamma, double distance) => distance / Math.Sqrt(1 + 2 * u.Convexity * gamma);

    /// <summary>The exact flow for a time γ: W′ = e^(−mγ) W. D. Bakry, M. Émery, Lect. Notes Math. 1123 (1985) 177-206 (from memory).</summary>
    public static double ExactFlow(ConvexityConstants u, double gamma, double distance) => distance * Math.Exp(-u.Convexity * gamma);

    /// <summary>
    /// JKO steps against the exact flow, at every step: W2² ≤ Mτ(F(ρ₀) − F_τ(ρ₀)), F_τ(ρ₀) = F(ρ₁) + W2²(ρ₀, ρ₁)/(2Mτ) the least value that the first step reaches; convex V, equal steps. Ambrosio, Gigli, Savaré,
    /// Theorem 4.0.4 (from memory).
    /// </summary>
    /// <returns>The bound on W2².</returns>
    public static double JkoFiniteEnergySquare(double mobility, double step, double freeEnergyAtStart, double freeEnergyAfterFirst, double firstDistance)
        => mobility * step * Math.Max(0, freeEnergyAtStart - freeEnergyAfterFirst - firstDistance * firstDistance / (2 * mobility * step));

    /// <summary>The same from the slope at the start: W2² ≤ ½(Mτ)²|∂F|²(ρ₀), |∂F|² = T²·I with I the relative Fisher information. The same theorem (from memory).</summary>
    /// <returns>The bound on W2².</returns>
    public static double JkoFiniteSlopeSquare(double mobility, double step, double slope) => 0.5 * Math.Pow(mobility * step * slope, 2);

    /// <summary>
    /// ULA: W² ≤ a(E|x − x*|² + d/m) + b, with a′ = a(1 − κγ/2) from a = 2, b′ = b(1 − κγ/2) + L²γ²(1/κ + γ)(2d + dL²γ/m + dL²γ²/6) from b = 0, κ = 2mL/(m + L); γ ≤ 1/(m + L), steps that do not
    /// grow. A. Durmus, É. Moulines, Bernoulli 25 (2019) 2854-2882, Theorem 5, stated there for a start at a point; for any start by convexity of W2² (from memory).
    /// </summary>
    /// <returns>The pair after the step; NaN where γ is too long.</returns>
    public static (double Memory, double Bias) UlaMoments(ConvexityConstants u, double gamma, (double Memory, double Bias) before)
    {
        var (m, l, d) = (u.Convexity, u.Smoothness, u.Dimension);
        if (!(gamma <= 1 / (m + l)))
            return (double.NaN, double.NaN);
        var kappa = 2 * m * l / (m + l);
        var kept = 1 - 0.5 * kappa * gamma;
        return (before.Memory * kept,
            before.Bias * kept + l * l * gamma * gamma * (1 / kappa + gamma) * (2 * d + d * l * l * gamma / m + d * l * l * gamma * gamma / 6));
    }
}

/// <summary>
/// Bound on the distance of proximal splitting (prox, then noise) to the exact flow from the same start, computed along a run from what the run itself shows:
/// W2²(ρₙ, ρ(tₙ)) ≤ Σ Mτ [F(ρₖ₋₁) − F(ρₖ)] + 2Mτ [E(ρₖ) − E(Pρₖ₋₁)], E = ∫V and P the proximal map: step, loss of free energy since the start, and rise of the potential energy in the noise steps.
/// </summary>
/// <remarks>
/// Needs a convex V. Proof: prox gives W2²(Pρ, ν) + 2Mτ(E(Pρ) − E(ν)) ≤ W2²(ρ, ν) for every ν, noise the same with T times the negative entropy; their sum is a discrete evolution variational
/// inequality for F with the error 2Mτ(E(ρₖ) − E(Pρₖ₋₁)); its comparison with that of the exact flow on the interpolated squared distance gives the sum (technique of R. Nochetto, G. Savaré, C. Verdi, Comm. Pure Appl.
/// Math. 53 (2000) 525-589, and L. Ambrosio, N. Gigli, G. Savaré, Gradient Flows, 2nd ed. 2008, §4; derived for this project).
/// </remarks>
public sealed class PosteriorBound
{
    private readonly double mobility;
    private double freeEnergy;
    private double square;

    /// <summary>Begins at the start of a run.</summary>
    /// <param name="mobility">M.</param>
    /// <param name="freeEnergy">F of the start.</param>
    public PosteriorBound(double mobility, double freeEnergy)
    {
        this.mobility = Require.Positive(mobility);
        this.freeEnergy = freeEnergy;
    }

    /// <summary>The bound on W2 now.</summary>
    public double Distance => Math.Sqrt(Math.Max(0, square));

    /// <summary>The bound on W2² now.</summary>
    public double Square => square;

    /// <summary>Mτ times the loss of free energy in the last step: what bends the bound between the last two steps (<see cref="BoundCurve.At"/>).</summary>
    public double Bend { get; private set; }

    /// <summary>Adds a step.</summary>
    /// <param name="step">τ.</param>
    /// <param name="freeEnergyAfter">F(ρₖ).</param>
    /// <param name="energyAfterMap">E(Pρₖ₋₁).</param>
    /// <param name="energyAfterNoise">E(ρₖ).</param>
    public void Add(double step, double freeEnergyAfter, double energyAfterMap, double energyAfterNoise)
    {
        Bend = mobility * step * (freeEnergy - freeEnergyAfter);
        square += Bend + 2 * mobility * step * (energyAfterNoise - energyAfterMap);
        freeEnergy = freeEnergyAfter;
    }
}
