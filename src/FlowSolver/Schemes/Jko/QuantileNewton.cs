using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Schemes.Jko;

/// <summary>How a minimisation ended.</summary>
/// <param name="Iterations">Newton steps taken.</param>
/// <param name="Residual">Length of the last Newton step, √(τ · decrement²), in units of length; the error left is of the order of its square.</param>
/// <param name="Converged">Whether that is below the tolerance.</param>
internal readonly record struct MinimisationReport(int Iterations, double Residual, bool Converged);

/// <summary>
/// Minimises E(x) = Σ μ_j (x_j − a_j)²/(2τ) − T Σ m_j log w_j over node positions x₀ &lt; … &lt; x_N, where w_j is the equilibrium's mass between nodes
/// j and j + 1, m_j the parcel's mass, μ_j half the sum of the masses beside node j, and a_j a given centre.
/// </summary>
/// <remarks>
/// <para>The logarithm is a barrier: nodes never meet. Damped Newton steps with the parcels' tension as a second unknown (the primal-dual form of a
/// barrier method; S. Mehrotra, On the implementation of a primal-dual interior point method, SIAM J. Optim. 2 (1992); from memory), so that parcels
/// which must grow or shrink by many powers of ten take a few steps, not one a factor of two.</para>
/// <para>The Hessian is a chain of springs k_j = T m_j q q′ between neighbouring nodes with weak ground springs c_j. It is eliminated in terms of k and
/// c, never of their sum (after W. K. Grassmann, M. I. Taksar, D. P. Heyman, Oper. Res. 33 (1985); from memory), which keeps relative
/// accuracy when k exceeds c by any factor. The widths of the parcels are unknowns of their own: a parcel in a far tail that is squeezed
/// below the spacing of doubles keeps all its digits.</para>
/// <para>The chain is cut into 32 equal pieces (H. H. Wang, A parallel method for tridiagonal equations, ACM Trans. Math. Softw. 7 (1981); from memory), one a
/// vector lane, whatever the machine and the number of threads: each piece is eliminated towards its two ends, a chain of 32 is solved, and the pieces are
/// filled in. Arrays hold row after row of 32 lanes: node or parcel j = lane·rows + row stands at row·32 + lane. One pass forward (energy,
/// gradient, Hessian and elimination together) and one back a Newton step, O(N).</para>
/// </remarks>
internal sealed class QuantileNewton
{
    /// <summary>Pieces of the chain; the number of parcels is a multiple of it.</summary>
    public const int Lanes = 32;

    private const int GroupLanes = 8;
    private const int Groups = Lanes / GroupLanes;
    private const int ParcelsForTeam = 8192;
    private const int MostIterations = 200;
    private const double BoundaryFraction = 0.995;
    private const double LeastFraction = 1e-12;
    private const double LeastDualFactor = 0.01;
    private const double LeastGroundShare = 0.1;
    private const double NarrowShare = 1e-3;

    // Parcels lighter than this hold the iteration up only until they are right to 1e-3, and only for so many Newton steps more than the rest takes.
    private const double SeenMass = 1e-12;
    private const int TailPatience = 10;

    // Parcels up to this mass give way to heavier ones; what so little mass does to the energy is not looked at.
    private const double LightMass = 1e-4;
    private const double LeastRoom = 0.1;
    private const double UnseenInEnergy = 1e-8;

    private static readonly double[] SeriesCoefficients = [.. Enumerable.Range(0, EquilibriumProfile.SeriesTerms + 1).Select(EquilibriumProfile.SeriesCoefficient)];

    private readonly EquilibriumProfile profile;
    private readonly WorkerTeam team;
    private readonly bool periodic;
    private readonly double length;
    private readonly double temperature;
    private readonly int rows;
    private readonly Action<int> forwardJob;
    private readonly Action<int> backwardJob;
    private readonly Action<int> stepJob;
    private readonly Action<int> retreatJob;

    private readonly double[] mass;
    private readonly double[] gap;
    private readonly double[] gapBefore;
    private readonly double[] change;
    private readonly double[] dual;

    // In the order along the axis.
    private readonly double[] target;
    private readonly double[] wish;
    private readonly bool[] repaired;

    // Elimination: position change = load + towardsLower·(lower end) + towardsUpper·(next), ground = 1 − towardsLower − towardsUpper.
    private readonly double[] towardsLower;
    private readonly double[] towardsUpper;
    private readonly double[] ground;
    private readonly double[] load;

    // Ends of the pieces; the last one is the upper end of the chain.
    private readonly double[] end = new double[Lanes + 1];
    private readonly double[] endBefore = new double[Lanes + 1];
    private readonly double[] endChange = new double[Lanes + 1];

    // What each piece leaves to its two ends.
    private readonly double[] conductance = new double[Lanes];
    private readonly double[] groundLower = new double[Lanes];
    private readonly double[] groundUpper = new double[Lanes];
    private readonly double[] ownLower = new double[Lanes];
    private readonly double[] ownUpper = new double[Lanes];
    private readonly double[] loadLower = new double[Lanes];
    private readonly double[] loadUpper = new double[Lanes];
    private readonly double[] logSum = new double[Lanes];
    private readonly double[] costSum = new double[Lanes];
    private readonly double[] decrementSum = new double[Lanes];
    private readonly double[] leastPivot = new double[Lanes];
    private readonly double[] mostShrink = new double[Lanes];
    private readonly double[] mostChange = new double[Lanes];
    private readonly double[] mostSeenChange = new double[Lanes];
    private readonly double[] chainLower = new double[Lanes];
    private readonly double[] chainUpper = new double[Lanes];
    private readonly double[] chainLoad = new double[Lanes];
    private readonly double[] chainGround = new double[Lanes];
    private readonly double[] endStretch = new double[Lanes];

    private double inverseStep;
    private bool stiffenLocally;
    private double fraction;

    public QuantileNewton(EquilibriumProfile profile, QuantileMesh mesh, WorkerTeam team)
    {
        this.profile = profile;
        this.team = team;
        periodic = profile.Axis.IsPeriodic;
        length = profile.Axis.Interval.Length;
        temperature = profile.Temperature;
        Count = mesh.Mass.Length;
        rows = Count / Lanes;
        Require.That(rows * Lanes == Count && rows >= 2, $"The number of parcels was {Count}; it must be a multiple of {Lanes}, at least {2 * Lanes}.");
        forwardJob = Forward;
        backwardJob = Backward;
        stepJob = Step;
        retreatJob = Retreat;
        mass = new double[Count];
        gap = new double[Count];
        gapBefore = new double[Count];
        change = new double[Count];
        dual = new double[Count];
        target = new double[Count];
        wish = new double[Count];
        repaired = new bool[Count];
        towardsLower = new double[Count];
        towardsUpper = new double[Count];
        ground = new double[Count];
        load = new double[Count];
        Center = new double[Count];
        for (var lane = 0; lane < Lanes; lane++)
        {
            for (var row = 0; row < rows; row++)
            {
                mass[row * Lanes + lane] = mesh.Mass[lane * rows + row];
                gap[row * Lanes + lane] = mesh.Gap[lane * rows + row];
            }

            end[lane] = mesh.Position[lane * rows];
        }

        end[Lanes] = mesh.Position[Count];
    }

    /// <summary>Number of parcels.</summary>
    public int Count { get; }

    /// <summary>Rows of 32 lanes.</summary>
    public int Rows => rows;

    /// <summary>a, in the order of the rows; for the caller to fill. The last node of a line is at the wall and has none.</summary>
    public double[] Center { get; }

    /// <summary>Masses of the parcels, in the order of the rows.</summary>
    public ReadOnlySpan<double> Mass => mass;

    /// <summary>Widths of the parcels, in the order of the rows.</summary>
    public Span<double> Gap => gap;

    /// <summary>Positions of the first node of each lane and of the last node of all.</summary>
    public Span<double> Ends => end;

    /// <summary>Half the masses beside the node of row <paramref name="row"/> in lane <paramref name="lane"/>.</summary>
    public double NodeMass(int row, int lane)
    {
        var above = mass[row * Lanes + lane];
        if (row > 0)
            return 0.5 * (mass[(row - 1) * Lanes + lane] + above);
        if (lane > 0)
            return 0.5 * (mass[(rows - 1) * Lanes + lane - 1] + above);
        return periodic ? 0.5 * (mass[(rows - 1) * Lanes + Lanes - 1] + above) : 0;
    }

    /// <summary>Writes the positions of the nodes, in the order of the rows.</summary>
    public void WritePositions(Span<double> destination)
    {
        end.AsSpan(0, Lanes).CopyTo(destination);
        for (var i = Lanes; i < destination.Length; i++)
            destination[i] = destination[i - Lanes] + gap[i - Lanes];
    }

    /// <summary>Where parcel or node <paramref name="index"/>, counted along the axis, stands in the order of the rows.</summary>
    public int PlaceOf(int index) => index % rows * Lanes + index / rows;

    /// <summary>Puts the lowest node at a place and the ends of the lanes where the widths say; on a line the widths are scaled to reach from wall to wall, on a circle around it.</summary>
    public void PlaceEnds(double lowest)
    {
        end[0] = lowest;
        var scale = length / SpanKernels.Sum(gap);
        SpanKernels.Scale(gap, scale);
        for (var lane = 0; lane < Lanes; lane++)
        {
            var sum = 0.0;
            for (var row = 0; row < rows; row++)
                sum += gap[row * Lanes + lane];
            end[lane + 1] = end[lane] + sum;
        }

        end[Lanes] = end[0] + length;
    }

    /// <summary>T Σ m log(m/w): the free energy above that of the equilibrium, of the density that is a multiple of the equilibrium in each parcel.</summary>
    public double FreeEnergyExcess()
    {
        inverseStep = 1;
        Array.Fill(dual, 1.0);
        RunBlocks(forwardJob);
        var entropy = 0.0;
        foreach (var parcel in mass)
            entropy += parcel * Math.Log(parcel);
        return temperature * (entropy - SpanKernels.Sum(logSum) + profile.LogMass);
    }

    /// <summary>E for a step, where the nodes are, less a constant.</summary>
    public double EnergyOf(double step)
    {
        inverseStep = 1 / step;
        stiffenLocally = false;
        Array.Fill(dual, 1.0);
        RunBlocks(forwardJob);
        return Energy();
    }

    /// <summary>Moves the nodes to the minimum, from where they are.</summary>
    /// <param name="step">τ times the mobility.</param>
    public MinimisationReport Minimise(double step)
    {
        inverseStep = 1 / step;
        stiffenLocally = false;
        Array.Fill(dual, 1.0);
        var energyBefore = double.PositiveInfinity;
        var decrementBefore = 0.0;
        var iterations = 0;
        var patience = TailPatience;
        var residual = double.PositiveInfinity;
        var repairedMass = 0.0;
        var shortFraction = 1.0;
        for (var evaluations = 0; evaluations < MostIterations; evaluations++)
        {
            RunBlocks(forwardJob);
            var energy = Energy();
            var slack = 1e-13 * (Math.Abs(energy) + temperature) + (repairedMass < UnseenInEnergy ? 50 * temperature * repairedMass : 0);
            if (energy > energyBefore - 1e-4 * fraction * decrementBefore + slack || double.IsNaN(energy))
            {
                fraction = repairedMass > 0 ? shortFraction : 0.5 * fraction;
                repairedMass = 0;
                if (fraction < LeastFraction)
                    break;
                RunBlocks(retreatJob);
                for (var i = 0; i <= Lanes; i++)
                    end[i] = endBefore[i] + fraction * endChange[i];
                continue;
            }

            if (!SolveEnds(out var decrement))
            {
                if (stiffenLocally)
                    break;
                stiffenLocally = true;
                // The same point again, with another model.
                energyBefore = double.PositiveInfinity;
                continue;
            }

            RunBlocks(backwardJob);
            var shrink = 0.0;
            var largest = 0.0;
            var seen = 0.0;
            for (var lane = 0; lane < Lanes; lane++)
            {
                shrink = Math.Max(shrink, mostShrink[lane]);
                largest = Math.Max(largest, mostChange[lane]);
                seen = Math.Max(seen, mostSeenChange[lane]);
            }

            residual = Math.Sqrt(step * decrement);
            shortFraction = BoundaryFraction / shrink;
            fraction = shrink < BoundaryFraction ? 1 : shortFraction;
            repairedMass = 0;
            if (fraction < 1 && RepairTails(out repairedMass))
            {
                fraction = 1;
            }
            else
            {
                RunBlocks(stepJob);
                for (var i = 0; i <= Lanes; i++)
                {
                    endBefore[i] = end[i];
                    end[i] += fraction * endChange[i];
                }
            }

            iterations++;
            if (repairedMass == 0 && residual <= 1e-8 * length && seen <= 1e-7 && (largest <= 1e-3 || --patience < 0))
                return new MinimisationReport(iterations, residual, true);
            (energyBefore, decrementBefore) = (energy, decrement);
            stiffenLocally &= largest > 0.1;
        }

        return new MinimisationReport(iterations, residual, false);
    }

    /// <summary>Takes out what rounding has left between the sum of a lane's widths and the distance of its ends. Once a step.</summary>
    public void CloseLanes()
    {
        Span<double> sum = stackalloc double[Lanes];
        sum.Clear();
        for (var row = 0; row < rows; row++)
        {
            for (var lane = 0; lane < Lanes; lane++)
                sum[lane] += gap[row * Lanes + lane];
        }

        for (var lane = 0; lane < Lanes; lane++)
        {
            // A lane squeezed below the spacing of doubles is right as it is: it is the positions of its ends that cannot tell.
            var ratio = (end[lane + 1] - end[lane]) / sum[lane];
            sum[lane] = Math.Abs(ratio - 1) < 1e-9 ? ratio : 1;
        }

        for (var row = 0; row < rows; row++)
        {
            for (var lane = 0; lane < Lanes; lane++)
                gap[row * Lanes + lane] *= sum[lane];
        }
    }

    private void RunBlocks(Action<int> job)
    {
        if (Count >= ParcelsForTeam)
        {
            team.Run(Groups, job);
            return;
        }

        for (var group = 0; group < Groups; group++)
            job(group);
    }

    // What one node contributes to the parcels beside it; see EquilibriumProfile for the letters.
    private struct Node
    {
        public Vector512<double> Cell;
        public Vector512<double> Left;
        public Vector512<double> Right;
        public Vector512<double> Level;
        public Vector512<double> Steepness;
        public Vector512<double> StartSlope;
        public Vector512<double> Scale;
        public bool AnySteep;

        // t, s and s′.
        public Vector512<double> Offset;
        public Vector512<double> Place;
        public Vector512<double> PlaceSlope;
        public Vector512<double> Exponential;

        // B(s, s) and D(s).
        public Vector512<double> Numerator;
        public Vector512<double> Denominator;

        // (log π)′.
        public Vector512<double> Slope;
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private void Evaluate(Vector512<double> position, ref Node node)
    {
        var inverseWidth = Vector512.Create(1 / profile.Axis.Width);
        var one = Vector512<double>.One;
        var scaled = position * inverseWidth;
        var cell = Vector512.Floor(scaled);
        if (!periodic)
            cell = Vector512.Min(Vector512.Max(cell, Vector512<double>.Zero), Vector512.Create(profile.Axis.Cells - 1.0));
        if (!Vector512.EqualsAll(cell, node.Cell))
            LoadCells(cell, ref node);
        var offset = scaled - cell;
        var t = offset;
        var placeSlope = one;
        if (node.AnySteep)
        {
            node.Exponential = VectorMath.Exp(-(node.Steepness * offset));
            t = Vector512.ConditionalSelect(
                Vector512.Equals(node.Steepness, Vector512<double>.Zero), offset, (one - node.Exponential) * node.Scale);
            placeSlope = node.StartSlope * node.Exponential;
        }

        var s = one - t;
        var edges = node.Left + node.Right - Vector512.Create(2.0);
        var turn = one - (t + t);
        var denominator = Vector512.FusedMultiplyAdd(edges, t * s, one);
        var numerator = Vector512.FusedMultiplyAdd(node.Left * s, s, Vector512.FusedMultiplyAdd(node.Right * t, t, (t + t) * s));
        var numeratorSlope = Vector512.FusedMultiplyAdd(node.Right, t, turn) - node.Left * s;
        var slope = (numeratorSlope * denominator - edges * turn * numerator) * (placeSlope + placeSlope) / (numerator * denominator);
        node.Slope = (slope - node.Steepness) * inverseWidth;
        node.Offset = offset;
        node.Place = t;
        node.PlaceSlope = placeSlope;
        node.Numerator = numerator;
        node.Denominator = denominator;
    }

    [MethodImpl(MethodImplOptions.NoInlining)]
    private void LoadCells(Vector512<double> cell, ref Node node)
    {
        Span<double> cells = stackalloc double[GroupLanes];
        Span<double> values = stackalloc double[6 * GroupLanes];
        cell.CopyTo(cells);
        for (var lane = 0; lane < GroupLanes; lane++)
        {
            // A position that is not a number would otherwise ask for a cell far outside.
            var entry = double.IsFinite(cells[lane]) ? EquilibriumProfile.Stride * profile.Wrap((int)cells[lane]) : 0;
            values[lane] = profile.Table[entry];
            values[GroupLanes + lane] = profile.Table[entry + 1];
            values[2 * GroupLanes + lane] = profile.Table[entry + 2];
            values[3 * GroupLanes + lane] = profile.Table[entry + 4];
            values[4 * GroupLanes + lane] = profile.Table[entry + 5];
            values[5 * GroupLanes + lane] = profile.Table[entry + 6];
        }

        node.Cell = cell;
        node.Left = Vector512.Create<double>(values[..GroupLanes]);
        node.Right = Vector512.Create<double>(values.Slice(GroupLanes, GroupLanes));
        node.Level = Vector512.Create<double>(values.Slice(2 * GroupLanes, GroupLanes));
        node.Steepness = Vector512.Create<double>(values.Slice(3 * GroupLanes, GroupLanes));
        node.StartSlope = Vector512.Create<double>(values.Slice(4 * GroupLanes, GroupLanes));
        node.Scale = Vector512.Create<double>(values.Slice(5 * GroupLanes, GroupLanes));
        node.AnySteep = !Vector512.EqualsAll(node.Steepness, Vector512<double>.Zero);
    }

    // π/w at the lower and at the upper node of each lane's parcel, and log w.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private void EvaluateParcel(
        in Node lower, in Node upper, Vector512<double> width, out Vector512<double> lowerPull, out Vector512<double> upperPull, out Vector512<double> logMass)
    {
        var s = lower.Place;
        var t = upper.Place;
        var one = Vector512<double>.One;
        var both = s * t;
        var numerator = Vector512.FusedMultiplyAdd(lower.Left * (one - s), one - t, Vector512.FusedMultiplyAdd(lower.Right, both, s + t - (both + both)));
        var distance = lower.AnySteep ? PlaceDifference(in lower, in upper, width) : width;
        var scaled = distance * numerator;
        var inverse = one / (scaled * (lower.Denominator * upper.Denominator));
        lowerPull = lower.PlaceSlope * lower.Numerator * (upper.Denominator * upper.Denominator) * inverse;
        upperPull = upper.PlaceSlope * upper.Numerator * (lower.Denominator * lower.Denominator) * inverse;
        var relative = scaled * (scaled * inverse);
        if (!Vector512.EqualsAll(lower.Cell, upper.Cell))
        {
            relative = Vector512.ConditionalSelect(Vector512.Equals(lower.Cell, upper.Cell), relative, one);
            CrossEdges(in lower, in upper, width, ref lowerPull, ref upperPull, ref relative, out var level);
            logMass = level + VectorMath.Log(relative);
            return;
        }

        logMass = lower.Level + VectorMath.Log(relative);
    }

    // s₂ − s₁ in units of length, for two places in one cell.
    [MethodImpl(MethodImplOptions.NoInlining)]
    private Vector512<double> PlaceDifference(in Node lower, in Node upper, Vector512<double> width)
    {
        var argument = lower.Steepness * (width * Vector512.Create(1 / profile.Axis.Width));
        var sum = Vector512.Create(SeriesCoefficients[EquilibriumProfile.SeriesTerms]);
        for (var k = EquilibriumProfile.SeriesTerms - 1; k >= 0; k--)
            sum = Vector512.FusedMultiplyAdd(sum, -argument, Vector512.Create(SeriesCoefficients[k]));
        var series = lower.PlaceSlope * width * sum;
        var direct = (lower.Exponential - upper.Exponential) * lower.Scale * Vector512.Create(profile.Axis.Width);
        return Vector512.ConditionalSelect(
            Vector512.LessThan(Vector512.Abs(argument), Vector512.Create(EquilibriumProfile.LargestSeriesArgument)), series, direct);
    }

    // (log π)′ at the lower node less its mean over the parcel, (π′s integral over w), and that mean less (log π)′ at the upper node. Of narrow
    // parcels the mean is that of both ends: the difference of two large numbers would be noise.
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private void Bend(
        in Node lower, in Node upper, Vector512<double> width, Vector512<double> lowerPull, Vector512<double> upperPull,
        out Vector512<double> lowerBend, out Vector512<double> upperBend)
    {
        var mean = upperPull - lowerPull;
        var narrow = Vector512.LessThan(width, Vector512.Create(NarrowShare * profile.Axis.Width));
        var half = Vector512.Create(0.5) * (lower.Slope - upper.Slope);
        lowerBend = Vector512.ConditionalSelect(narrow, half, lower.Slope - mean);
        upperBend = Vector512.ConditionalSelect(narrow, half, mean - upper.Slope);
    }

    // The lanes whose parcels reach over a cell edge, one by one.
    [MethodImpl(MethodImplOptions.NoInlining)]
    private void CrossEdges(
        in Node lower, in Node upper, Vector512<double> width,
        ref Vector512<double> lowerPull, ref Vector512<double> upperPull, ref Vector512<double> relative, out Vector512<double> level)
    {
        Span<double> values = stackalloc double[5 * GroupLanes];
        lowerPull.CopyTo(values);
        upperPull.CopyTo(values[GroupLanes..]);
        relative.CopyTo(values[(2 * GroupLanes)..]);
        lower.Level.CopyTo(values[(3 * GroupLanes)..]);
        width.CopyTo(values[(4 * GroupLanes)..]);
        for (var lane = 0; lane < GroupLanes; lane++)
        {
            var (first, last) = (lower.Cell[lane], upper.Cell[lane]);
            if (first == last || double.IsNaN(first) || double.IsNaN(last))
                continue;
            var lowerDensity = lower.PlaceSlope[lane] * lower.Numerator[lane] / (lower.Denominator[lane] * lower.Denominator[lane]);
            var upperDensity = upper.PlaceSlope[lane] * upper.Numerator[lane] / (upper.Denominator[lane] * upper.Denominator[lane]);
            var found = profile.MassAcross(
                (int)first, lower.Offset[lane], (int)last, upper.Offset[lane], values[4 * GroupLanes + lane]);
            values[lane] = lowerDensity * found.LowerScale / found.Mass;
            values[GroupLanes + lane] = upperDensity * found.UpperScale / found.Mass;
            values[2 * GroupLanes + lane] = found.Mass;
            values[3 * GroupLanes + lane] = found.Level;
        }

        lowerPull = Vector512.Create<double>(values[..GroupLanes]);
        upperPull = Vector512.Create<double>(values.Slice(GroupLanes, GroupLanes));
        relative = Vector512.Create<double>(values.Slice(2 * GroupLanes, GroupLanes));
        level = Vector512.Create<double>(values.Slice(3 * GroupLanes, GroupLanes));
    }

    private void Forward(int group)
    {
        var lane = (nuint)(group * GroupLanes);
        ref var masses = ref MemoryMarshal.GetArrayDataReference(mass);
        ref var gaps = ref MemoryMarshal.GetArrayDataReference(gap);
        ref var duals = ref MemoryMarshal.GetArrayDataReference(dual);
        ref var centers = ref MemoryMarshal.GetArrayDataReference(Center);
        ref var ends = ref MemoryMarshal.GetArrayDataReference(end);
        ref var lowers = ref MemoryMarshal.GetArrayDataReference(towardsLower);
        ref var uppers = ref MemoryMarshal.GetArrayDataReference(towardsUpper);
        ref var grounds = ref MemoryMarshal.GetArrayDataReference(ground);
        ref var loads = ref MemoryMarshal.GetArrayDataReference(load);
        var heat = Vector512.Create(temperature);
        var rate = Vector512.Create(inverseStep);
        var floor = Vector512.Create(stiffenLocally ? LeastGroundShare * inverseStep : double.NegativeInfinity);
        var half = Vector512.Create(0.5);

        var node = new Node { Cell = Vector512.Create(double.NaN) };
        var position = Vector512.LoadUnsafe(ref ends, lane);
        Evaluate(position, ref node);
        var below = node;

        var parcel = Vector512.LoadUnsafe(ref masses, lane);
        var width = Vector512.LoadUnsafe(ref gaps, lane);
        position += width;
        Evaluate(position, ref node);
        EvaluateParcel(in below, in node, width, out var lowerPull, out var upperPull, out var logMass);
        var logs = parcel * logMass;
        var costs = Vector512<double>.Zero;
        var tension = heat * Vector512.LoadUnsafe(ref duals, lane) * parcel;

        // The lower end's share of the first parcel.
        Bend(in below, in node, width, lowerPull, upperPull, out var lowerBend, out var upperBend);
        (tension * lowerPull * lowerBend).StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(ownLower), lane);
        var endGround = Vector512<double>.Zero;
        var endLoad = -(heat * parcel * lowerPull);
        var toLower = tension * lowerPull * upperPull;
        var carriedGround = Vector512<double>.Zero;
        var carriedLoad = Vector512<double>.Zero;
        var decrement = Vector512<double>.Zero;
        var least = Vector512.Create(double.PositiveInfinity);

        for (var row = 1; row < rows; row++)
        {
            var at = (nuint)(row * Lanes) + lane;
            below = node;
            var parcelBelow = parcel;
            // Of the parcel below: what it pulls at this node, and its ground spring here.
            var pullBelow = parcelBelow * upperPull;
            var groundHere = tension * upperPull * upperBend;

            parcel = Vector512.LoadUnsafe(ref masses, at);
            width = Vector512.LoadUnsafe(ref gaps, at);
            var here = position;
            position = row == rows - 1 ? Vector512.LoadUnsafe(ref ends, lane + 1) : position + width;
            Evaluate(position, ref node);
            EvaluateParcel(in below, in node, width, out lowerPull, out upperPull, out logMass);
            logs = Vector512.FusedMultiplyAdd(parcel, logMass, logs);
            tension = heat * Vector512.LoadUnsafe(ref duals, at) * parcel;

            var nodeMass = half * (parcelBelow + parcel);
            var way = here - Vector512.LoadUnsafe(ref centers, at);
            costs = Vector512.FusedMultiplyAdd(nodeMass * way, way, costs);
            var gradient = Vector512.FusedMultiplyAdd(heat, parcel * lowerPull - pullBelow, nodeMass * way * rate);
            Bend(in below, in node, width, lowerPull, upperPull, out lowerBend, out upperBend);
            groundHere = Vector512.FusedMultiplyAdd(tension * lowerPull, lowerBend, groundHere);
            groundHere = Vector512.Max(Vector512.FusedMultiplyAdd(nodeMass, rate, groundHere), nodeMass * floor) + carriedGround;
            var toUpper = tension * lowerPull * upperPull;
            var loadHere = carriedLoad - gradient;

            var pivot = toLower + toUpper + groundHere;
            least = Vector512.Min(least, pivot);
            var inverse = Vector512<double>.One / pivot;
            var lowerShare = toLower * inverse;
            var upperShare = toUpper * inverse;
            var scaledLoad = loadHere * inverse;
            lowerShare.StoreUnsafe(ref lowers, at);
            upperShare.StoreUnsafe(ref uppers, at);
            (groundHere * inverse).StoreUnsafe(ref grounds, at);
            scaledLoad.StoreUnsafe(ref loads, at);
            decrement = Vector512.FusedMultiplyAdd(loadHere, scaledLoad, decrement);
            endGround = Vector512.FusedMultiplyAdd(lowerShare, groundHere, endGround);
            endLoad = Vector512.FusedMultiplyAdd(lowerShare, loadHere, endLoad);
            carriedGround = upperShare * groundHere;
            carriedLoad = upperShare * loadHere;
            toLower *= upperShare;
        }

        toLower.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(conductance), lane);
        endGround.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(groundLower), lane);
        endLoad.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(loadLower), lane);
        (tension * upperPull * upperBend).StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(ownUpper), lane);
        carriedGround.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(groundUpper), lane);
        Vector512.FusedMultiplyAdd(heat, parcel * upperPull, carriedLoad).StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(loadUpper), lane);
        logs.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(logSum), lane);
        costs.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(costSum), lane);
        decrement.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(decrementSum), lane);
        least.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(leastPivot), lane);
    }

    // The sum that is minimised, less a constant.
    private double Energy()
    {
        var cost = SpanKernels.Sum(costSum);
        for (var lane = periodic ? 0 : 1; lane < Lanes; lane++)
        {
            var way = end[lane] - Center[lane];
            cost += NodeMass(0, lane) * way * way;
        }

        return 0.5 * inverseStep * cost - temperature * SpanKernels.Sum(logSum);
    }

    // Solves for the changes of the ends of the pieces; false when the quadratic model is not convex.
    private bool SolveEnds(out double decrement)
    {
        decrement = SpanKernels.Sum(decrementSum);
        var convex = true;
        foreach (var pivot in leastPivot)
            convex &= pivot > 0;

        Array.Clear(endChange);
        double carriedGround = 0, carriedLoad = 0, firstGround = 0, firstLoad = 0;
        var toFirst = conductance[0];
        for (var i = periodic ? 0 : 1; i < Lanes; i++)
        {
            var nodeMass = NodeMass(0, i);
            var way = end[i] - Center[i];
            var below = i == 0 ? Lanes - 1 : i - 1;
            var groundHere = nodeMass * inverseStep + ownLower[i] + ownUpper[below];
            if (stiffenLocally)
                groundHere = Math.Max(groundHere, LeastGroundShare * nodeMass * inverseStep);
            groundHere += groundLower[i] + groundUpper[below];
            var loadHere = -nodeMass * way * inverseStep + loadLower[i] + loadUpper[below];
            if (i == 0)
            {
                (firstGround, firstLoad) = (groundHere, loadHere);
                continue;
            }

            groundHere += carriedGround;
            loadHere += carriedLoad;
            var pivot = toFirst + conductance[i] + groundHere;
            convex &= pivot > 0;
            chainLower[i] = toFirst / pivot;
            chainUpper[i] = conductance[i] / pivot;
            chainLoad[i] = loadHere / pivot;
            chainGround[i] = groundHere / pivot;
            decrement += loadHere * chainLoad[i];
            firstGround += chainLower[i] * groundHere;
            firstLoad += chainLower[i] * loadHere;
            carriedGround = chainUpper[i] * groundHere;
            carriedLoad = chainUpper[i] * loadHere;
            toFirst *= chainUpper[i];
        }

        if (periodic)
        {
            // The chain closes on itself: what is left between its two ends is no force at all.
            firstGround += carriedGround;
            firstLoad += carriedLoad;
            convex &= firstGround > 0;
            endChange[0] = endChange[Lanes] = firstLoad / firstGround;
            decrement += firstLoad * endChange[0];
        }

        // As within a piece: changes relative to the first end, and stretches of stiff pieces from their forces.
        var above = endChange[Lanes] - endChange[0];
        for (var i = Lanes - 1; i > 0; i--)
        {
            var toGround = chainGround[i];
            var here = chainLoad[i] - toGround * endChange[0] + chainUpper[i] * above;
            endChange[i] = endChange[0] + here;
            endStretch[i] = chainUpper[i] > 0.5
                ? (toGround * endChange[i] + chainLower[i] * here - chainLoad[i]) / chainUpper[i]
                : above - here;
            above = here;
        }

        endStretch[0] = above;
        return convex;
    }

    private void Backward(int group)
    {
        var lane = (nuint)(group * GroupLanes);
        ref var gaps = ref MemoryMarshal.GetArrayDataReference(gap);
        ref var changes = ref MemoryMarshal.GetArrayDataReference(change);
        ref var lowers = ref MemoryMarshal.GetArrayDataReference(towardsLower);
        ref var uppers = ref MemoryMarshal.GetArrayDataReference(towardsUpper);
        ref var grounds = ref MemoryMarshal.GetArrayDataReference(ground);
        ref var loads = ref MemoryMarshal.GetArrayDataReference(load);
        ref var ends = ref MemoryMarshal.GetArrayDataReference(endChange);
        var half = Vector512.Create(0.5);
        var lowerEnd = Vector512.LoadUnsafe(ref ends, lane);
        // Changes relative to the lower end: parcels that are stiffly tied to it change by far less than it moves.
        var above = Vector512.LoadUnsafe(ref MemoryMarshal.GetArrayDataReference(endStretch), lane);
        var shrink = Vector512<double>.Zero;
        var largest = Vector512<double>.Zero;
        var seen = Vector512<double>.Zero;
        ref var masses = ref MemoryMarshal.GetArrayDataReference(mass);
        for (var row = rows - 1; row >= 0; row--)
        {
            var at = (nuint)(row * Lanes) + lane;
            var stretch = above;
            if (row > 0)
            {
                var toLower = Vector512.LoadUnsafe(ref lowers, at);
                var toUpper = Vector512.LoadUnsafe(ref uppers, at);
                var toGround = Vector512.LoadUnsafe(ref grounds, at);
                var loadHere = Vector512.LoadUnsafe(ref loads, at);
                var here = Vector512.FusedMultiplyAdd(toUpper, above, loadHere - toGround * lowerEnd);
                // A parcel that is stiffer than all else at the node stretches by what its force asks for, not by a difference of positions.
                var balance = (Vector512.FusedMultiplyAdd(toGround, lowerEnd + here, toLower * here) - loadHere) / toUpper;
                stretch = Vector512.ConditionalSelect(Vector512.GreaterThan(toUpper, half), balance, above - here);
                above = here;
            }

            stretch.StoreUnsafe(ref changes, at);
            var relative = stretch / Vector512.LoadUnsafe(ref gaps, at);
            shrink = Vector512.Max(shrink, -relative);
            largest = Vector512.Max(largest, Vector512.Abs(relative));
            var counts = Vector512.GreaterThan(Vector512.LoadUnsafe(ref masses, at), Vector512.Create(SeenMass));
            seen = Vector512.Max(seen, Vector512.Abs(relative) & counts);
        }

        seen.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(mostSeenChange), lane);
        shrink.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(mostShrink), lane);
        largest.StoreUnsafe(ref MemoryMarshal.GetArrayDataReference(mostChange), lane);
    }

    private void Step(int group)
    {
        var lane = (nuint)(group * GroupLanes);
        ref var gaps = ref MemoryMarshal.GetArrayDataReference(gap);
        ref var before = ref MemoryMarshal.GetArrayDataReference(gapBefore);
        ref var changes = ref MemoryMarshal.GetArrayDataReference(change);
        ref var duals = ref MemoryMarshal.GetArrayDataReference(dual);
        var part = Vector512.Create(fraction);
        var one = Vector512<double>.One;
        for (var row = 0; row < rows; row++)
        {
            var at = (nuint)(row * Lanes) + lane;
            var width = Vector512.LoadUnsafe(ref gaps, at);
            var stretch = Vector512.LoadUnsafe(ref changes, at);
            width.StoreUnsafe(ref before, at);
            Vector512.FusedMultiplyAdd(part, stretch, width).StoreUnsafe(ref gaps, at);
            // The tension takes the whole Newton step, kept positive; in units of mass over width it is 1 when both agree.
            var relative = stretch / width;
            var tension = Vector512.LoadUnsafe(ref duals, at);
            tension = Vector512.Max(one - tension * relative, Vector512.Create(LeastDualFactor) * tension);
            (tension * Vector512.FusedMultiplyAdd(part, relative, one)).StoreUnsafe(ref duals, at);
        }
    }

    // A full Newton step although light parcels would fold under it: each of them takes the width that its tension asks for, scaled with so many light
    // neighbours as give room, so that tails do not hold up what carries the mass. False, and nothing is changed, where that takes heavy parcels.
    private bool RepairTails(out double repairedMass)
    {
        repairedMass = 0;
        for (var j = 0; j < Count; j++)
        {
            var place = PlaceOf(j);
            var relative = change[place] / gap[place];
            target[j] = gap[place] + change[place];
            wish[j] = relative < 0 ? gap[place] / (1 - dual[place] * relative) : target[j];
        }

        Array.Clear(repaired);
        for (var j = 0; j < Count; j++)
        {
            if (target[j] >= LeastRoom * gap[PlaceOf(j)])
                continue;
            var (low, high) = (j, j);
            var (room, need) = (target[j], wish[j]);
            while (room < LeastRoom * need && (low > 0 || high < Count - 1))
            {
                if (high < Count - 1)
                {
                    high++;
                    (room, need) = (room + target[high], need + wish[high]);
                }

                if (low > 0 && room < LeastRoom * need)
                {
                    low--;
                    (room, need) = (room + target[low], need + wish[low]);
                }
            }

            if (room < LeastRoom * need)
                return false;
            for (var k = low; k <= high; k++)
            {
                if (mass[PlaceOf(k)] > LightMass)
                    return false;
                repairedMass += mass[PlaceOf(k)];
                target[k] = wish[k] * (room / need);
                repaired[k] = true;
            }

            j = high;
        }

        var position = 0.0;
        for (var lane = 0; lane <= Lanes; lane++)
        {
            endBefore[lane] = end[lane];
            // Nodes within a repaired stretch stand where the widths put them, all others where Newton's step does.
            var node = lane * rows;
            var inside = node > 0 && node < Count && repaired[node] && repaired[node - 1];
            end[lane] = inside ? position : end[lane] + endChange[lane];
            position = end[lane];
            for (var row = 0; row < rows && lane < Lanes; row++)
                position += target[node + row];
        }

        for (var j = 0; j < Count; j++)
        {
            var place = PlaceOf(j);
            var relative = change[place] / gap[place];
            gapBefore[place] = gap[place];
            dual[place] = Math.Max(1 - dual[place] * relative, LeastDualFactor * dual[place]) * (target[j] / gap[place]);
            gap[place] = target[j];
        }

        return true;
    }

    private void Retreat(int group)
    {
        var lane = (nuint)(group * GroupLanes);
        ref var gaps = ref MemoryMarshal.GetArrayDataReference(gap);
        ref var before = ref MemoryMarshal.GetArrayDataReference(gapBefore);
        ref var changes = ref MemoryMarshal.GetArrayDataReference(change);
        ref var duals = ref MemoryMarshal.GetArrayDataReference(dual);
        var part = Vector512.Create(fraction);
        for (var row = 0; row < rows; row++)
        {
            var at = (nuint)(row * Lanes) + lane;
            Vector512.FusedMultiplyAdd(part, Vector512.LoadUnsafe(ref changes, at), Vector512.LoadUnsafe(ref before, at)).StoreUnsafe(ref gaps, at);
            Vector512<double>.One.StoreUnsafe(ref duals, at);
        }
    }
}
