using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Schemes.ExactFlow;

namespace FlowSolver.Studies;

/// <summary>Mean times until a walker first reaches a set, and odds of reaching one set before another, each by one linear solve with the generator.</summary>
/// <remarks>
/// τ solves −Aᵀτ = 1 off the set with τ = 0 on it; the committor q solves Aᵀq = 0 off both sets, q = 1 on the one and 0 on the other (C. Gardiner, Handbook of
/// Stochastic Methods, from memory). The equations are those of a network of conductances; they are solved by elimination without subtraction on a line, and by
/// conjugate gradients with multigrid in the plane, so that times over high barriers keep their digits. Second order in h.
/// </remarks>
public static class PassageTimes
{
    /// <summary>
    /// Mean first passage time to a set of cells from every cell, in units of time. In the plane NaN everywhere when barriers are so high (times of about 1e16 of
    /// those within a well) that the solution loses its digits.
    /// </summary>
    /// <param name="generator">The rates.</param>
    /// <param name="target">Whether each cell belongs to the set; length the cell count, at least one and not all.</param>
    /// <exception cref="ArgumentException">The set is empty or everything, or the length is wrong.</exception>
    public static double[] MeanToSet(Generator generator, ReadOnlySpan<bool> target)
    {
        ArgumentNullException.ThrowIfNull(generator);
        Require.That(target.Length == generator.Grid.CellCount && target.Contains(true) && target.Contains(false),
            "The target set was empty, held every cell or had another length than the grid; it must hold some cells of the grid.");
        var network = GeneratorNetwork.Grounded(generator, target, default);
        var source = GeneratorNetwork.Masses(generator);
        for (var i = 0; i < source.Length; i++)
        {
            if (target[i])
                source[i] = 0;
        }

        var times = Solved(network, source);
        for (var i = 0; i < times.Length; i++)
        {
            if (target[i])
                times[i] = 0;
        }

        return times;
    }

    /// <summary>The committor: the probability of reaching set <paramref name="second"/> before set <paramref name="first"/> from every cell.</summary>
    /// <exception cref="ArgumentException">A set is empty, they overlap, or a length is wrong.</exception>
    public static double[] Committor(Generator generator, ReadOnlySpan<bool> first, ReadOnlySpan<bool> second)
    {
        ArgumentNullException.ThrowIfNull(generator);
        var count = generator.Grid.CellCount;
        Require.That(first.Length == count && second.Length == count && first.Contains(true) && second.Contains(true),
            "A set of the committor was empty or had another length than the grid; both must hold some cells of the grid.");
        for (var i = 0; i < count; i++)
            Require.That(!(first[i] && second[i]), "The two sets of the committor shared a cell; they must not.");
        var network = GeneratorNetwork.Grounded(generator, first, second);
        var result = Solved(network, GeneratorNetwork.CurrentFrom(generator, second));
        for (var i = 0; i < count; i++)
            result[i] = first[i] ? 0 : second[i] ? 1 : Math.Clamp(result[i], 0, 1);
        return result;
    }

    /// <summary>Mean first passage time from one point of a line between walls to another, in units of time.</summary>
    /// <remarks>
    /// On a line the time is a sum over the edges passed, Σ (mass behind the edge)/(conductance of the edge), so that it is the difference of one function of
    /// position; that function is interpolated between centres by cubics. A wall, or a potential that confines, lies behind the start.
    /// </remarks>
    /// <exception cref="ArgumentException">The grid is not a line between walls, or a point lies outside.</exception>
    public static double BetweenPoints(Generator generator, double from, double to)
    {
        ArgumentNullException.ThrowIfNull(generator);
        var grid = generator.Grid;
        Require.That(grid.Y is null && !grid.X.IsPeriodic, "A passage between points was asked for on a plane or a circle; it needs a line between walls.");
        Require.That(grid.X.Interval.Contains(from) && grid.X.Interval.Contains(to), $"A point of the passage ({from} to {to}) lay outside the domain; both must lie inside.");
        var (count, pi) = (grid.Nx, GeneratorNetwork.Masses(generator));
        var times = new double[count];
        double behind = 0;
        if (to >= from)
        {
            for (var i = 0; i < count - 1; i++)
            {
                behind += pi[i];
                times[i + 1] = times[i] + behind / (pi[i] * generator.RateRight[i]);
            }

            return At(times, grid.X, to) - At(times, grid.X, from);
        }

        for (var i = count - 1; i > 0; i--)
        {
            behind += pi[i];
            times[i - 1] = times[i] + behind / (pi[i] * generator.RateLeft[i]);
        }

        return At(times, grid.X, to) - At(times, grid.X, from);
    }

    // The cubic through the four centres around a position.
    private static double At(double[] values, Axis axis, double position)
    {
        var place = (position - axis.Center(0)) / axis.Width;
        var first = Math.Clamp((int)Math.Floor(place) - 1, 0, values.Length - 4);
        var sum = 0.0;
        for (var a = 0; a < 4; a++)
        {
            var weight = 1.0;
            for (var b = 0; b < 4; b++)
            {
                if (b != a)
                    weight *= (place - first - b) / (a - b);
            }

            sum += weight * values[first + a];
        }

        return sum;
    }

    private static double[] Solved(GridNetwork network, double[] source)
    {
        var solution = new double[source.Length];
        // On a line everything is one elimination; in the plane the coarsest of the networks is.
        var line = network.Nx == 1;
        var multigrid = new NetworkMultigrid(network, line ? int.MaxValue : 1100);
        if (line)
            multigrid.Apply(source, solution, multigrid.NewWorkspace());
        // Rounding may end the iteration before that tolerance; what is left is then judged.
        else if (!(multigrid.Solve(source, solution, 1e-12).Error < 1e-4))
            Array.Fill(solution, double.NaN);
        return solution;
    }
}

/// <summary>A generator as a network: conductance π_i r_ij of each edge, weight π_i of each cell (masses). A line becomes a column of cells.</summary>
internal static class GeneratorNetwork
{
    /// <summary>π_i times the volume of a cell, of sum 1.</summary>
    public static double[] Masses(Generator generator)
    {
        var masses = (double[])generator.Problem.Equilibrium.Values.Clone();
        SpanKernels.Scale(masses, generator.Grid.CellVolume);
        return masses;
    }

    // The same with 0 below what a network can carry.
    private static double[] CarriedMasses(Generator generator)
    {
        var masses = Masses(generator);
        for (var i = 0; i < masses.Length; i++)
        {
            if (masses[i] < Nothing)
                masses[i] = 0;
        }

        return masses;
    }

    public static GridNetwork Of(Generator generator) => Grounded(generator, default, default);

    /// <summary>The network in which the cells of two sets are held at 0: their links lead to ground.</summary>
    public static GridNetwork Grounded(Generator generator, ReadOnlySpan<bool> first, ReadOnlySpan<bool> second)
    {
        var grid = generator.Grid;
        var (count, masses) = (grid.CellCount, grid.Y is null ? Masses(generator) : CarriedMasses(generator));
        var linkX = new double[count];
        var linkY = new double[grid.Y is null ? 0 : count];
        var ground = new double[count];
        for (var cell = 0; cell < count; cell++)
        {
            Place(cell, generator.RightOf(cell), Conductance(masses, cell, generator.RightOf(cell), generator.RateRight, generator.RateLeft), linkX, first, second, ground);
            if (grid.Y is not null)
                Place(cell, generator.Above(cell), Conductance(masses, cell, generator.Above(cell), generator.RateUp, generator.RateDown), linkY, first, second, ground);
        }

        // Held cells stand alone and are held.
        for (var cell = 0; cell < count; cell++)
        {
            if (Holds(first, cell) || Holds(second, cell))
                ground[cell] = Math.Max(masses[cell], Nothing) * generator.ExitRate[cell];
        }

        return grid.Y is null
            ? new GridNetwork(1, count, new double[count], linkX, ground, masses)
            : new GridNetwork(grid.Nx, grid.Ny, linkX, linkY, ground, masses, grid.Y.Width / grid.X.Width);
    }

    // Links below it are cut: what lies behind them holds nothing, and products with shares on coarser networks would underflow.
    private const double Nothing = 1e-200;

    // By the end that has more mass, whose rate is the small one: nothing underflows before it must.
    private static double Conductance(double[] masses, int cell, int neighbour, ReadOnlySpan<double> forward, ReadOnlySpan<double> back)
    {
        var conductance = masses[cell] >= masses[neighbour] ? masses[cell] * forward[cell] : masses[neighbour] * back[neighbour];
        return conductance > Nothing ? conductance : 0;
    }

    private static void Place(
        int cell, int neighbour, double conductance, double[] links, ReadOnlySpan<bool> first, ReadOnlySpan<bool> second, double[] ground)
    {
        var here = Holds(first, cell) || Holds(second, cell);
        var there = Holds(first, neighbour) || Holds(second, neighbour);
        if (!here && !there)
            links[cell] = conductance;
        else if (here && !there)
            ground[neighbour] += conductance;
        else if (there && !here)
            ground[cell] += conductance;
    }

    private static bool Holds(ReadOnlySpan<bool> set, int cell) => set.Length > 0 && set[cell];

    /// <summary>What the cells of a set send into their neighbours when held at 1.</summary>
    public static double[] CurrentFrom(Generator generator, ReadOnlySpan<bool> set)
    {
        var masses = Masses(generator);
        var current = new double[masses.Length];
        for (var cell = 0; cell < current.Length; cell++)
        {
            Send(cell, generator.RightOf(cell), Conductance(masses, cell, generator.RightOf(cell), generator.RateRight, generator.RateLeft), set, current);
            if (generator.Grid.Y is not null)
                Send(cell, generator.Above(cell), Conductance(masses, cell, generator.Above(cell), generator.RateUp, generator.RateDown), set, current);
        }

        return current;
    }

    private static void Send(int cell, int neighbour, double conductance, ReadOnlySpan<bool> set, double[] current)
    {
        if (set[cell] && !set[neighbour])
            current[neighbour] += conductance;
        else if (set[neighbour] && !set[cell])
            current[cell] += conductance;
    }
}
