using FlowSolver.Foundation;

namespace FlowSolver.Problems;

/// <summary>
/// The drift-diffusion (Fokker-Planck) equation ∂ρ/∂t = M ∇·(ρ∇V + T∇ρ) on a domain, with a start. Immutable.
/// </summary>
/// <remarks>
/// Its walkers obey dX = −M∇V dt + √(2MT) dW. It is the Wasserstein-2 gradient flow of the free energy F(ρ) = ∫ρV + T∫ρ log ρ; its equilibrium is
/// π = e^(−V/T)/Z (R. Jordan, D. Kinderlehrer, F. Otto, SIAM J. Math. Anal. 29 (1998) 1-17).
/// </remarks>
public sealed record Problem
{
    /// <summary>States a problem.</summary>
    /// <exception cref="ArgumentException">A value is out of range or the dimensions disagree.</exception>
    public Problem(Potential potential, double temperature, Domain domain, StartDensity start, double mobility = 1.0, string title = "")
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        ArgumentNullException.ThrowIfNull(start);
        Require.That(potential.Dimension == domain.Dimension,
            $"The potential has {potential.Dimension} variable(s) and the domain {domain.Dimension} axis/axes; they must agree.");
        Potential = potential;
        Temperature = Require.Positive(temperature);
        Mobility = Require.Positive(mobility);
        Domain = domain;
        Start = start;
        Title = title;
    }

    /// <summary>A line for the reader.</summary>
    public string Title { get; init; }

    /// <summary>V.</summary>
    public Potential Potential { get; init; }

    /// <summary>T, in units of energy (k_B T).</summary>
    public double Temperature { get; init; }

    /// <summary>M: length² per energy and time. It only rescales time.</summary>
    public double Mobility { get; init; }

    /// <summary>Where the walkers can be.</summary>
    public Domain Domain { get; init; }

    /// <summary>Where they are at time 0.</summary>
    public StartDensity Start { get; init; }

    /// <summary>1 or 2.</summary>
    public int Dimension => Domain.Dimension;
}
