using FlowSolver.Foundation;
using FlowSolver.Schemes.ExactFlow;

namespace FlowSolver.Studies;

/// <summary>Long-time diffusion of a walker that is not wrapped but counted from turn to turn on the periodic axes, in length²/time: variance grows by 2D·t.</summary>
/// <param name="XX">Along x; null where x is not periodic.</param>
/// <param name="YY">Along y; null where y is not periodic or there is none.</param>
/// <param name="XY">Between the two; null unless both are periodic.</param>
public sealed record DiffusionTensor(double? XX, double? YY, double? XY);

/// <summary>Effective diffusion in a periodic landscape.</summary>
/// <remarks>
/// In one dimension D = M T L²/(∫e^(V/T) · ∫e^(−V/T)) (S. Lifson, J. Jackson, J. Chem. Phys. 36 (1962) 2410-2414, from memory), here with the resistances of the grid's
/// edges; in two the conductance of the unit cell as a network, D = min_χ Σ c_e (Δχ + Δx)² (homogenisation: A. Bensoussan, J.-L. Lions, G. Papanicolaou,
/// Asymptotic Analysis for Periodic Structures, 1978, from memory).
/// </remarks>
public static class EffectiveDiffusion
{
    /// <summary>The tensor; null when no axis is periodic.</summary>
    public static DiffusionTensor? Of(Generator generator)
    {
        ArgumentNullException.ThrowIfNull(generator);
        var grid = generator.Grid;
        if (grid.Y is null)
            return grid.X.IsPeriodic ? new DiffusionTensor(OnLine(generator), null, null) : null;
        if (!grid.X.IsPeriodic && !grid.Y.IsPeriodic)
            return null;
        var network = GeneratorNetwork.Of(generator);
        var multigrid = new NetworkMultigrid(network);
        var alongX = grid.X.IsPeriodic ? Corrector(network, multigrid, network.LinkX, 1, grid.Nx, grid.X.Width) : null;
        var alongY = grid.Y.IsPeriodic ? Corrector(network, multigrid, network.LinkY, grid.Nx, grid.CellCount, grid.Y.Width) : null;
        double? Entry(double[]? first, double[]? second, bool firstX, bool secondX)
            => first is null || second is null ? null : Energy(generator, network, first, second, firstX, secondX);
        return new DiffusionTensor(Entry(alongX, alongX, true, true), Entry(alongY, alongY, false, false), Entry(alongX, alongY, true, false));
    }

    private static double OnLine(Generator generator)
    {
        var masses = GeneratorNetwork.Masses(generator);
        var resistance = 0.0;
        for (var i = 0; i < masses.Length; i++)
        {
            var next = generator.RightOf(i);
            resistance += 1 / (masses[i] >= masses[next] ? masses[i] * generator.RateRight[i] : masses[next] * generator.RateLeft[next]);
        }

        var length = generator.Grid.X.Interval.Length;
        return length * length / resistance;
    }

    // Kχ = what the slope of the coordinate sends into each cell.
    private static double[] Corrector(GridNetwork network, NetworkMultigrid multigrid, double[] links, int step, int period, double width)
    {
        var source = new double[network.Count];
        for (var cell = 0; cell < source.Length; cell++)
        {
            source[cell] += width * links[cell];
            source[Next(cell, step, period)] -= width * links[cell];
        }

        var corrector = new double[source.Length];
        multigrid.Solve(source, corrector);
        return corrector;
    }

    private static int Next(int cell, int step, int period)
        => step == 1 ? (cell % period == period - 1 ? cell - period + 1 : cell + 1) : cell + step >= period ? cell + step - period : cell + step;

    private static double Energy(Generator generator, GridNetwork network, double[] first, double[] second, bool firstX, bool secondX)
    {
        var grid = generator.Grid;
        var (widthX, widthY) = (grid.X.Width, grid.Y!.Width);
        var sum = 0.0;
        for (var cell = 0; cell < first.Length; cell++)
        {
            var (right, above) = (generator.RightOf(cell), generator.Above(cell));
            sum += network.LinkX[cell] * (first[right] - first[cell] + (firstX ? widthX : 0)) * (second[right] - second[cell] + (secondX ? widthX : 0))
                + network.LinkY[cell] * (first[above] - first[cell] + (firstX ? 0 : widthY)) * (second[above] - second[cell] + (secondX ? 0 : widthY));
        }

        return sum;
    }
}
