
namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// How far an error that is small in a weighted norm may be from small in mass: the factor by which a polynomial or rational approximation of
/// e^(tA) can magnify truncation and rounding for the density at hand.
/// </summary>
/// <remarks>
/// A is symmetric in the norm weighted by 1/π, so that errors there stay below ε‖ρ‖. In mass that is ε·√(∫ρ²/π): harmless near equilibrium, of no
/// use for mass that starts many temperatures above the minimum. Over a short time mass moves a short way, and a weight that follows π only as
/// steeply as that allows serves as well: g = e^(−(V − U)/2T) with U ≤ V the largest function whose change over an edge with coupling s is at most
/// 2T·arcosh(1 + q/(2 d δ s)). In that norm e^(δA) and its approximations stay below e^q, and the mass of an error is at most ε·‖g‖·‖ρ/g‖. For
/// δ → ∞, U is the least value of V and the first norm returns. (Weighted norms for the tails of heat kernels: E. B. Davies, Heat Kernels and
/// Spectral Theory, Cambridge 1989, chapter 3; this discrete form is derived here.)
/// </remarks>
internal sealed class ErrorReach(Generator generator)
{
    private readonly double[] floor = new double[generator.Grid.CellCount];
    private readonly double[] slackRight = new double[generator.Grid.CellCount];
    private readonly double[] slackUp = new double[generator.RateUp.Length];

    /// <summary>√(∫ρ²/π), relative to the same with a constant weight; infinite where ρ is above 0 and π underflows.</summary>
    public double Global(ReadOnlySpan<double> density)
    {
        var equilibrium = generator.Problem.Equilibrium.Values;
        double weighted = 0, plain = 0;
        for (var i = 0; i < density.Length; i++)
        {
            var square = density[i] * density[i];
            plain += square;
            if (square > 0)
                weighted += square / equilibrium[i];
        }

        return Math.Sqrt(weighted / (plain * Volume));
    }

    /// <summary>‖g‖·‖ρ/g‖ for steps of length <paramref name="time"/>, relative to the same with a constant weight.</summary>
    /// <param name="density">ρ.</param>
    /// <param name="time">δ.</param>
    /// <param name="drift">q.</param>
    public double Local(ReadOnlySpan<double> density, double time, double drift)
    {
        Lower(time, drift);
        var potential = generator.Problem.CellPotential;
        var inverse = 1 / (2 * generator.Problem.Problem.Temperature);
        double weighted = 0, plain = 0, weight = 0;
        for (var i = 0; i < density.Length; i++)
        {
            var height = (potential[i] - floor[i]) * inverse;
            weight += Math.Exp(-2 * height);
            if (density[i] == 0)
                continue;
            plain += density[i] * density[i];
            var raised = height < 600 ? density[i] * Math.Exp(height) : Math.Exp(height + Math.Log(density[i]));
            weighted += raised * raised;
        }

        return Math.Sqrt(weight / density.Length * (weighted / plain));
    }

    private double Volume
    {
        get
        {
            var grid = generator.Grid;
            return grid.X.Interval.Length * (grid.Y?.Interval.Length ?? 1);
        }
    }

    // U: from V downwards, cell by cell, no more than the slack above a neighbour. Sweeps both ways until nothing changes.
    private void Lower(double time, double drift)
    {
        var grid = generator.Grid;
        var (nx, count) = (grid.Nx, grid.CellCount);
        var twoT = 2 * generator.Problem.Problem.Temperature;
        var scale = drift / (2 * grid.Dimension * time);
        for (var i = 0; i < count; i++)
            slackRight[i] = twoT * Math.Acosh(1 + scale / generator.CouplingRight(i));
        for (var i = 0; i < slackUp.Length; i++)
            slackUp[i] = twoT * Math.Acosh(1 + scale / generator.CouplingUp(i));
        generator.Problem.CellPotential.CopyTo(floor, 0);
        var changed = true;
        while (changed)
        {
            changed = false;
            for (var i = 0; i < count; i++)
                changed |= Relax(i, nx, count);
            for (var i = count - 1; i >= 0; i--)
                changed |= Relax(i, nx, count);
        }
    }

    private bool Relax(int cell, int nx, int count)
    {
        var neighbour = cell % nx == nx - 1 ? cell - nx + 1 : cell + 1;
        var changed = Bound(cell, neighbour, slackRight[cell]);
        if (slackUp.Length == 0)
            return changed;
        neighbour = cell >= count - nx ? cell - (count - nx) : cell + nx;
        return changed | Bound(cell, neighbour, slackUp[cell]);
    }

    // Changes below rounding must not keep the sweeps going.
    private bool Bound(int cell, int neighbour, double slack)
    {
        if (floor[cell] > floor[neighbour] + slack)
        {
            var changed = floor[cell] - (floor[neighbour] + slack) > 1e-12 * Math.Abs(floor[cell]);
            floor[cell] = floor[neighbour] + slack;
            return changed;
        }

        if (floor[neighbour] > floor[cell] + slack)
        {
            var changed = floor[neighbour] - (floor[cell] + slack) > 1e-12 * Math.Abs(floor[neighbour]);
            floor[neighbour] = floor[cell] + slack;
            return changed;
        }

        return false;
    }
}
