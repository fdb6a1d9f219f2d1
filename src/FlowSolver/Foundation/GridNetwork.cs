using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// A network of conductances on the cells of a grid, each linked to its neighbours along the axes and perhaps to ground:
/// (Ku)_i = Σ_j c_ij (u_i − u_j) + g_i u_i, with a weight m_i a cell. Fields are flat, x fastest. Immutable.
/// </summary>
public sealed class GridNetwork
{
    internal readonly double[] LinkX;
    internal readonly double[] LinkY;
    // Links to the neighbours up and to the right, and up and to the left: only coarser networks have them.
    internal readonly double[] LinkUpRight;
    internal readonly double[] LinkUpLeft;
    internal readonly double[] Earth;
    internal readonly double[] Mass;

    /// <summary>States a network.</summary>
    /// <param name="nx">Cells along x.</param>
    /// <param name="ny">Cells along y; 1 on a line.</param>
    /// <param name="linkX">Conductance from each cell to the next along x; from the last of a row to the first where x is a circle, 0 there otherwise.</param>
    /// <param name="linkY">The same along y; empty when <paramref name="ny"/> is 1.</param>
    /// <param name="ground">Conductance to ground.</param>
    /// <param name="weights">Weights m, not below 0, of sum above 0.</param>
    /// <param name="ratio">Cell width along y over that along x.</param>
    /// <exception cref="ArgumentException">A length differs from the cell count.</exception>
    public GridNetwork(int nx, int ny, double[] linkX, double[] linkY, double[] ground, double[] weights, double ratio = 1)
        : this(nx, ny, linkX, ny == 1 ? new double[nx] : linkY, [], [], ground, weights, ratio)
    {
    }

    internal GridNetwork(
        int nx, int ny, double[] linkX, double[] linkY, double[] linkUpRight, double[] linkUpLeft, double[] ground, double[] weights, double ratio)
    {
        ArgumentNullException.ThrowIfNull(linkX);
        ArgumentNullException.ThrowIfNull(linkY);
        ArgumentNullException.ThrowIfNull(ground);
        ArgumentNullException.ThrowIfNull(weights);
        Nx = Require.AtLeast(nx, 1);
        Ny = Require.AtLeast(ny, 1);
        Require.Length(linkX.Length, Count);
        Require.Length(linkY.Length, Count);
        Require.Length(ground.Length, Count);
        Require.Length(weights.Length, Count);
        LinkX = linkX;
        LinkY = linkY;
        LinkUpRight = linkUpRight;
        LinkUpLeft = linkUpLeft;
        Earth = ground;
        Mass = weights;
        Ratio = Require.Positive(ratio);
    }

    /// <summary>Cells along x.</summary>
    public int Nx { get; }

    /// <summary>Cells along y.</summary>
    public int Ny { get; }

    /// <summary>Cells in all.</summary>
    public int Count => checked(Nx * Ny);

    /// <summary>Cell width along y over that along x.</summary>
    public double Ratio { get; }

    /// <summary>m: weight of each cell.</summary>
    public ReadOnlySpan<double> Weights => Mass;

    /// <summary>Whether nothing leads to ground, so that a constant is in the kernel.</summary>
    public bool IsFloating => SpanKernels.MaxAbs(Earth) == 0;

    /// <summary>The same network with a conductance to ground of <paramref name="rate"/> times the weight added in every cell.</summary>
    internal GridNetwork Grounded(double rate)
    {
        var ground = (double[])Earth.Clone();
        SpanKernels.AddScaled(ground, rate, Mass);
        return new GridNetwork(Nx, Ny, LinkX, LinkY, LinkUpRight, LinkUpLeft, ground, Mass, Ratio);
    }

    /// <summary>Writes Ku for the cells of one row; differences first, so that a constant gives 0 to the last bit.</summary>
    internal void ApplyRow(ReadOnlySpan<double> u, int row, Span<double> target)
    {
        var (first, up, down) = (row * Nx, row == Ny - 1 ? 0 : (row + 1) * Nx, row == 0 ? (Ny - 1) * Nx : (row - 1) * Nx);
        var last = Nx - 1;
        EndCell(u, first, up, down, 0, target);
        if (last == 0)
            return;
        var i = 1;
        ref var h = ref MemoryMarshal.GetReference(u.Slice(first, Nx));
        ref var a = ref MemoryMarshal.GetReference(u.Slice(up, Nx));
        ref var b = ref MemoryMarshal.GetReference(u.Slice(down, Nx));
        ref var cr = ref LinkX[first];
        ref var ca = ref LinkY[first];
        ref var cb = ref LinkY[down];
        ref var g = ref Earth[first];
        ref var t = ref MemoryMarshal.GetReference(target);
        var diagonals = LinkUpRight.Length > 0;
        for (; i + 8 <= last; i += 8)
        {
            var at = (nuint)i;
            var value = Vector512.LoadUnsafe(ref h, at);
            var sum = Vector512.LoadUnsafe(ref g, at) * value;
            sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref cr, at), value - Vector512.LoadUnsafe(ref h, at + 1), sum);
            sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref cr, at - 1), value - Vector512.LoadUnsafe(ref h, at - 1), sum);
            sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref ca, at), value - Vector512.LoadUnsafe(ref a, at), sum);
            sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref cb, at), value - Vector512.LoadUnsafe(ref b, at), sum);
            if (diagonals)
            {
                ref var upRight = ref LinkUpRight[first];
                ref var upLeft = ref LinkUpLeft[first];
                ref var fromDownLeft = ref LinkUpRight[down];
                ref var fromDownRight = ref LinkUpLeft[down];
                sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref upRight, at), value - Vector512.LoadUnsafe(ref a, at + 1), sum);
                sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref upLeft, at), value - Vector512.LoadUnsafe(ref a, at - 1), sum);
                sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref fromDownLeft, at - 1), value - Vector512.LoadUnsafe(ref b, at - 1), sum);
                sum = Vector512.FusedMultiplyAdd(Vector512.LoadUnsafe(ref fromDownRight, at + 1), value - Vector512.LoadUnsafe(ref b, at + 1), sum);
            }

            sum.StoreUnsafe(ref t, at);
        }

        for (; i <= last; i++)
            EndCell(u, first, up, down, i, target);
    }

    private void EndCell(ReadOnlySpan<double> u, int first, int up, int down, int i, Span<double> target)
    {
        var (left, right) = (i == 0 ? Nx - 1 : i - 1, i == Nx - 1 ? 0 : i + 1);
        var here = u[first + i];
        var sum = LinkX[first + i] * (here - u[first + right]) + LinkX[first + left] * (here - u[first + left])
            + LinkY[first + i] * (here - u[up + i]) + LinkY[down + i] * (here - u[down + i]) + Earth[first + i] * here;
        if (LinkUpRight.Length > 0)
        {
            sum += LinkUpRight[first + i] * (here - u[up + right]) + LinkUpLeft[first + i] * (here - u[up + left])
                + LinkUpRight[down + left] * (here - u[down + left]) + LinkUpLeft[down + right] * (here - u[down + right]);
        }

        target[i] = sum;
    }

    /// <summary>target ← Ku.</summary>
    /// <exception cref="ArgumentException">A length differs from the cell count.</exception>
    public void Apply(ReadOnlySpan<double> u, Span<double> target)
    {
        Require.Length(u.Length, Count);
        Require.Length(target.Length, Count);
        for (var row = 0; row < Ny; row++)
            ApplyRow(u, row, target.Slice(row * Nx, Nx));
    }

    /// <summary>uᵀKu, as a sum over links: relatively accurate also where Ku is a small difference.</summary>
    public double Energy(ReadOnlySpan<double> u)
    {
        Require.Length(u.Length, Count);
        var sum = 0.0;
        for (var row = 0; row < Ny; row++)
        {
            var rowSum = 0.0;
            for (var i = 0; i < Nx; i++)
            {
                var cell = row * Nx + i;
                rowSum += Earth[cell] * u[cell] * u[cell];
                foreach (var (other, conductance) in LinksFrom(cell))
                {
                    var difference = u[cell] - u[other];
                    rowSum += conductance * difference * difference;
                }
            }

            sum += rowSum;
        }

        return sum;
    }

    /// <summary>The links that a cell owns: to the right, up, and diagonally up. Each link of the network appears once over all cells.</summary>
    internal LinkList LinksFrom(int cell) => new(this, cell);

    /// <summary>Enumerates without allocating.</summary>
    internal struct LinkList(GridNetwork network, int cell)
    {
        private int step = -1;

        public readonly LinkList GetEnumerator() => this;

        public readonly (int Other, double Conductance) Current
        {
            get
            {
                var (nx, ny) = (network.Nx, network.Ny);
                var (i, j) = (cell % nx, cell / nx);
                var right = i == nx - 1 ? 0 : i + 1;
                var left = i == 0 ? nx - 1 : i - 1;
                var up = j == ny - 1 ? 0 : j + 1;
                return step switch
                {
                    0 => (j * nx + right, network.LinkX[cell]),
                    1 => (up * nx + i, network.LinkY[cell]),
                    2 => (up * nx + right, network.LinkUpRight[cell]),
                    _ => (up * nx + left, network.LinkUpLeft[cell]),
                };
            }
        }

        public bool MoveNext() => ++step < (network.LinkUpRight.Length > 0 ? 4 : 2);
    }

    /// <summary>
    /// A diagonal D for Jacobi sweeps: that of K, and more where links are negative (as few are on coarser networks), so that all eigenvalues of D⁻¹K lie in [0, 2].
    /// </summary>
    internal double[] Diagonal()
    {
        var sum = new double[Count];
        var sizes = new double[Count];
        for (var cell = 0; cell < Count; cell++)
        {
            foreach (var (other, conductance) in LinksFrom(cell))
            {
                if (other == cell)
                    continue;
                sum[cell] += conductance;
                sum[other] += conductance;
                sizes[cell] += Math.Abs(conductance);
                sizes[other] += Math.Abs(conductance);
            }
        }

        for (var cell = 0; cell < Count; cell++)
            sum[cell] = Math.Max(sum[cell] + Earth[cell], 0.5 * (sum[cell] + Earth[cell] + sizes[cell]));
        return sum;
    }

    /// <summary>The direct solver of this network.</summary>
    internal DirectNetwork Direct() => new(this);

    /// <summary>A network solved by elimination; rows are taken from both ends in turn where y is a circle, which keeps links short.</summary>
    internal sealed class DirectNetwork
    {
        private readonly NetworkElimination elimination;
        private readonly int[] place;
        private readonly double[] values;
        private readonly int nx;

        public DirectNetwork(GridNetwork network)
        {
            (nx, var ny) = (network.Nx, network.Ny);
            var wrapsY = network.LinksAcrossY();
            place = new int[ny];
            for (var j = 0; j < ny; j++)
                place[j] = !wrapsY ? j : j < (ny + 1) / 2 ? 2 * j : 2 * (ny - 1 - j) + 1;
            values = new double[nx * ny];
            var reach = 1;
            for (var cell = 0; cell < network.Count; cell++)
            {
                foreach (var (other, conductance) in network.LinksFrom(cell))
                {
                    if (conductance != 0)
                        reach = Math.Max(reach, Math.Abs(Node(cell) - Node(other)));
                }
            }

            elimination = new NetworkElimination(network.Count, reach);
            for (var cell = 0; cell < network.Count; cell++)
            {
                elimination.Ground(Node(cell), network.Earth[cell]);
                foreach (var (other, conductance) in network.LinksFrom(cell))
                {
                    if (conductance != 0 && other != cell)
                        elimination.Link(Node(cell), Node(other), conductance);
                }
            }

            // Without ground, the heaviest cell is held: a source of sum 0 leaves it at exactly 0, and what rounding leaves of the sum moves all cells
            // alike and by little. Held anywhere else it would have to pass through conductances that may be tiny.
            if (network.IsFloating)
            {
                var diagonal = network.Diagonal();
                var heaviest = 0;
                for (var cell = 1; cell < diagonal.Length; cell++)
                {
                    if (diagonal[cell] > diagonal[heaviest])
                        heaviest = cell;
                }

                elimination.Ground(Node(heaviest), diagonal[heaviest]);
            }

            elimination.Factor();
        }

        private int Node(int cell) => place[cell / nx] * nx + cell % nx;

        /// <summary>u ← K⁻¹f.</summary>
        public void Solve(ReadOnlySpan<double> f, Span<double> u)
        {
            lock (values)
            {
                for (var j = 0; j < place.Length; j++)
                    f.Slice(j * nx, nx).CopyTo(values.AsSpan(place[j] * nx));
                elimination.Solve(values);
                for (var j = 0; j < place.Length; j++)
                    values.AsSpan(place[j] * nx, nx).CopyTo(u[(j * nx)..]);
            }
        }
    }

    internal bool LinksAcrossY()
    {
        for (var cell = Count - Nx; cell < Count && Ny > 1; cell++)
        {
            if (LinkY[cell] > 0)
                return true;
        }

        return false;
    }

    internal bool LinksAcrossX()
    {
        for (var cell = Nx - 1; cell < Count && Nx > 1; cell += Nx)
        {
            if (LinkX[cell] > 0)
                return true;
        }

        return false;
    }
}
