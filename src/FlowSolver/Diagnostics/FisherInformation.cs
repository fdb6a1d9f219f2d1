using FlowSolver.Foundation;
using FlowSolver.Schemes.ExactFlow;

namespace FlowSolver.Diagnostics;

/// <summary>The relative Fisher information I(ρ|π) = ∫ρ|∇log(ρ/π)|², in 1/length², for which dF/dt = −M·T²·I along the exact flow.</summary>
/// <remarks>
/// On the grid it is the sum over edges of (net flux across the edge)·(log(ρ_j/π_j) − log(ρ_i/π_i))·volume/(M·T), with the flux that the
/// <see cref="Generator"/> gives: the identity for dF/dt then holds for the discrete free energy along the flow on the grid to rounding, not only as the
/// cells shrink (the discrete entropy method, as in A. Mielke, Calc. Var. 48 (2013) 1-31, from memory).
/// </remarks>
public static class FisherInformation
{
    // An empty cell counts as holding this much, so that cells emptied by rounding far out do not make the sum infinite.
    private const double Nothing = 1e-300;

    /// <summary>I of a density on the generator's grid. Infinite when the density has holes that matter: cells at 0 beside cells that hold mass.</summary>
    /// <param name="generator">The rates.</param>
    /// <param name="density">Cell averages of mass 1; length the grid's cell count.</param>
    /// <exception cref="ArgumentException">The length differs from the cell count.</exception>
    public static double Of(Generator generator, ReadOnlySpan<double> density)
    {
        ArgumentNullException.ThrowIfNull(generator);
        var grid = generator.Grid;
        Require.Length(density.Length, grid.CellCount);
        double whole = 0, atHoles = 0;
        for (var row = 0; row < grid.Ny; row++)
        {
            double rowWhole = 0, rowHoles = 0;
            for (var i = 0; i < grid.Nx; i++)
            {
                var cell = row * grid.Nx + i;
                Add(cell, generator.RightOf(cell), generator.RateRight, generator.RateLeft, density, generator, ref rowWhole, ref rowHoles);
                if (grid.Y is not null)
                    Add(cell, generator.Above(cell), generator.RateUp, generator.RateDown, density, generator, ref rowWhole, ref rowHoles);
            }

            whole += rowWhole;
            atHoles += rowHoles;
        }

        // An edge beside a hole contributes flux times an infinite logarithm. At the stand-in value, several hundred, that must stay out of sight.
        if (atHoles > 1e-9 * whole)
            return double.PositiveInfinity;
        var problem = generator.Problem.Problem;
        return (whole + atHoles) * grid.CellVolume / (problem.Mobility * problem.Temperature);
    }

    private static void Add(
        int cell, int neighbour, ReadOnlySpan<double> forward, ReadOnlySpan<double> back, ReadOnlySpan<double> density, Generator generator,
        ref double whole, ref double atHoles)
    {
        var (here, there) = (density[cell], density[neighbour]);
        if ((here == 0 && there == 0) || (forward[cell] == 0 && back[neighbour] == 0))
            return;
        var potential = generator.Problem.CellPotential;
        var difference = Math.Log(Math.Max(there, Nothing) / Math.Max(here, Nothing))
            + (potential[neighbour] - potential[cell]) / generator.Problem.Problem.Temperature;
        // Net flux from the cell with the larger ρ/π: ρ·r·(1 − e^(−|difference|)).
        var outward = difference > 0 ? there * back[neighbour] : here * forward[cell];
        var size = Math.Abs(difference);
        var term = outward * ShareLost(size) * size;
        if (here == 0 || there == 0)
            atHoles += term;
        else
            whole += term;
    }

    // 1 − e^(−d) without cancelling.
    private static double ShareLost(double d)
    {
        if (d > 0.25)
            return 1 - Math.Exp(-d);
        var sum = 1.0;
        for (var k = 11; k >= 2; k--)
            sum = 1 - d / k * sum;
        return sum * d;
    }
}
