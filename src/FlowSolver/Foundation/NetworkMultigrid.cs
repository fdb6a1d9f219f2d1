using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// A symmetric V-cycle of multigrid for a <see cref="GridNetwork"/>: an approximate inverse of K to precondition with. Immutable; workspaces are separate.
/// </summary>
/// <remarks>
/// Two Jacobi sweeps before and after, their weights by Chebyshev for the upper three quarters of the spectrum (M. Adams, M. Brezina, J. Hu,
/// R. Tuminaro, J. Comput. Phys. 188 (2003) 593-610, from memory); interpolation that follows the conductances, and its transpose (<c>NetworkCoarsening</c>);
/// elimination on the coarsest. A. Brandt, Math. Comp. 31 (1977) 333-390.
/// </remarks>
public sealed class NetworkMultigrid
{
    // Chebyshev weights of two sweeps for eigenvalues of D⁻¹K from 1/2 to 2.
    private const double FirstWeight = 1 / (1.25 + 0.75 * 0.70710678118654757);
    private const double SecondWeight = 1 / (1.25 - 0.75 * 0.70710678118654757);

    private readonly List<GridNetwork> networks = [];
    private readonly List<double[]> inverseDiagonals = [];
    private readonly List<NetworkCoarsening> coarsenings = [];
    private readonly GridNetwork.DirectNetwork direct;

    /// <summary>Builds the coarser networks.</summary>
    /// <param name="network">The finest network.</param>
    /// <param name="coarsest">Largest number of cells that is solved by elimination.</param>
    public NetworkMultigrid(GridNetwork network, int coarsest = 1100)
    {
        ArgumentNullException.ThrowIfNull(network);
        networks.Add(network);
        while (networks[^1].Count > coarsest)
        {
            var coarsening = new NetworkCoarsening(networks[^1]);
            if (coarsening.Coarse.Count == networks[^1].Count)
                break;
            coarsenings.Add(coarsening);
            networks.Add(coarsening.Coarse);
        }

        foreach (var level in networks)
        {
            var inverse = level.Diagonal();
            for (var i = 0; i < inverse.Length; i++)
                inverse[i] = inverse[i] > 1e-290 ? 1 / inverse[i] : 0;
            inverseDiagonals.Add(inverse);
        }

        direct = networks[^1].Direct();
    }

    /// <summary>The networks, finest first.</summary>
    public IReadOnlyList<GridNetwork> Networks => networks;

    /// <summary>Memory for one V-cycle at a time.</summary>
    public sealed class Workspace
    {
        internal Workspace(NetworkMultigrid owner)
        {
            foreach (var network in owner.networks)
                Levels.Add((new double[network.Count], new double[network.Count], new double[network.Count]));
            Row = new double[owner.networks[0].Nx];
        }

        internal List<(double[] U, double[] F, double[] R)> Levels { get; } = [];

        internal double[] Row { get; }
    }

    /// <summary>New memory for a V-cycle.</summary>
    public Workspace NewWorkspace() => new(this);

    /// <summary>u ← an approximation of K⁻¹f by one V-cycle. Without any ground f should have sum 0, and u is fixed up to a constant.</summary>
    /// <param name="f">f; length the cell count of network <paramref name="level"/>.</param>
    /// <param name="u">Receives u.</param>
    /// <param name="workspace">Memory.</param>
    /// <param name="level">The network that f belongs to; 0 for the finest.</param>
    public void Apply(ReadOnlySpan<double> f, Span<double> u, Workspace workspace, int level = 0)
    {
        ArgumentNullException.ThrowIfNull(workspace);
        f.CopyTo(workspace.Levels[level].F);
        Cycle(level, workspace);
        workspace.Levels[level].U.CopyTo(u);
    }

    private void Cycle(int level, Workspace workspace)
    {
        var (u, f, r) = workspace.Levels[level];
        if (level == networks.Count - 1)
        {
            direct.Solve(f, u);
            return;
        }

        var network = networks[level];
        var inverse = inverseDiagonals[level];
        Scaled(inverse, f, FirstWeight, r);
        Sweep(network, inverse, f, r, u, SecondWeight, workspace.Row);
        Residual(network, f, u, r, workspace.Row);
        coarsenings[level].Restrict(r, workspace.Levels[level + 1].F);
        Cycle(level + 1, workspace);
        coarsenings[level].Interpolate(workspace.Levels[level + 1].U, u, add: true);
        Sweep(network, inverse, f, u, r, SecondWeight, workspace.Row);
        Sweep(network, inverse, f, r, u, FirstWeight, workspace.Row);
    }

    private static void Scaled(double[] inverse, double[] f, double weight, double[] target)
    {
        var factor = Vector512.Create(weight);
        var d = MemoryMarshal.Cast<double, Vector512<double>>(inverse.AsSpan());
        var s = MemoryMarshal.Cast<double, Vector512<double>>(f.AsSpan());
        var t = MemoryMarshal.Cast<double, Vector512<double>>(target.AsSpan());
        for (var i = 0; i < t.Length; i++)
            t[i] = factor * d[i] * s[i];
        for (var i = t.Length * 8; i < target.Length; i++)
            target[i] = weight * inverse[i] * f[i];
    }

    // next ← u + weight · D⁻¹(f − Ku).
    private static void Sweep(GridNetwork network, double[] inverse, double[] f, double[] u, double[] next, double weight, double[] row)
    {
        var nx = network.Nx;
        var ku = row.AsSpan(0, nx);
        var factor = Vector512.Create(weight);
        for (var j = 0; j < network.Ny; j++)
        {
            network.ApplyRow(u, j, ku);
            var at = j * nx;
            ref var k = ref MemoryMarshal.GetReference(ku);
            ref var source = ref f[at];
            ref var here = ref u[at];
            ref var d = ref inverse[at];
            ref var target = ref next[at];
            var i = 0;
            for (; i + 8 <= nx; i += 8)
            {
                var offset = (nuint)i;
                var rest = Vector512.LoadUnsafe(ref source, offset) - Vector512.LoadUnsafe(ref k, offset);
                Vector512.FusedMultiplyAdd(factor * Vector512.LoadUnsafe(ref d, offset), rest, Vector512.LoadUnsafe(ref here, offset)).StoreUnsafe(ref target, offset);
            }

            for (; i < nx; i++)
                next[at + i] = Math.FusedMultiplyAdd(weight * inverse[at + i], f[at + i] - ku[i], u[at + i]);
        }
    }

    private static void Residual(GridNetwork network, double[] f, double[] u, double[] residual, double[] row)
    {
        var nx = network.Nx;
        var ku = row.AsSpan(0, nx);
        for (var j = 0; j < network.Ny; j++)
        {
            network.ApplyRow(u, j, ku);
            var target = residual.AsSpan(j * nx, nx);
            f.AsSpan(j * nx, nx).CopyTo(target);
            SpanKernels.AddScaled(target, -1, ku);
        }
    }

    /// <summary>Interpolates a field from network <paramref name="level"/> + 1 to network <paramref name="level"/>.</summary>
    internal void Interpolate(int level, double[] coarse, double[] fine) => coarsenings[level].Interpolate(coarse, fine, add: false);

    /// <summary>Solves Ku = f by conjugate gradients with the V-cycle.</summary>
    /// <remarks>
    /// The measure of the error is √(rᵀBr/uᵀf) with the residual r and the V-cycle B: close to the error's energy relative to the solution's, which bounds the relative
    /// error of a time or a current also where they are exponentially large. Where rounding keeps it from falling any further the iteration ends.
    /// </remarks>
    /// <param name="f">f; of sum 0 where nothing is grounded.</param>
    /// <param name="u">Start, and receives the solution.</param>
    /// <param name="tolerance">Bound on the measure.</param>
    /// <param name="mostIterations">Iterations after which it stops.</param>
    /// <returns>Iterations taken, and the measure reached.</returns>
    public (int Iterations, double Error) Solve(ReadOnlySpan<double> f, Span<double> u, double tolerance = 1e-10, int mostIterations = 200)
    {
        var network = networks[0];
        var count = network.Count;
        Require.Length(f.Length, count);
        Require.Length(u.Length, count);
        var workspace = NewWorkspace();
        var (r, z, p, kp) = (new double[count], new double[count], new double[count], new double[count]);
        network.Apply(u, r);
        for (var i = 0; i < count; i++)
            r[i] = f[i] - r[i];
        double before = 0, least = double.PositiveInfinity;
        var leastAt = 0;
        for (var iteration = 0; ; iteration++)
        {
            Apply(r, z, workspace);
            var now = SpanKernels.Dot(r, z);
            var size = SpanKernels.Dot(f, u);
            var error = now == 0 ? 0 : Math.Sqrt(Math.Abs(now / size));
            if (now < least)
                (least, leastAt) = (now, iteration);
            if ((iteration > 0 || now == 0) && (error <= tolerance || iteration >= leastAt + 6) || iteration == mostIterations)
                return (iteration, error);
            if (iteration == 0)
            {
                z.CopyTo(p, 0);
            }
            else
            {
                SpanKernels.Scale(p, now / before);
                SpanKernels.AddScaled(p, 1, z);
            }

            before = now;
            network.Apply(p, kp);
            var step = now / SpanKernels.Dot(p, kp);
            SpanKernels.AddScaled(u, step, p);
            SpanKernels.AddScaled(r, -step, kp);
        }
    }
}
