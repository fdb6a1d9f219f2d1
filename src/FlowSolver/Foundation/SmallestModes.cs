using System.Collections.Concurrent;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>Slow modes of a network: Ku = λMu.</summary>
/// <param name="Rates">λ above the zero of the constant (where nothing is grounded), in increasing order.</param>
/// <param name="Modes">u of each, Σ m u² = 1, positive where it carries most weight.</param>
/// <param name="Residuals">√(Σ (Ku − λMu)²/m) of each: λ is off by at most its square over the distance to the other rates.</param>
/// <param name="Iterations">Iterations on the finest network.</param>
/// <param name="Converged">Whether every residual met its tolerance. Where not, rates may be NaN.</param>
public sealed record NetworkModes(double[] Rates, double[][] Modes, double[] Residuals, int Iterations, bool Converged);

/// <summary>The smallest eigenvalues and modes of a <see cref="GridNetwork"/> weighted by its cells.</summary>
/// <remarks>
/// Locally optimal block conjugate gradients (A. Knyazev, SIAM J. Sci. Comput. 23 (2001) 517-541) with a multigrid V-cycle, started on the coarsest network, where the
/// cycle is a direct solution, and carried up network by network, so that few iterations are left on the finest. The constant is kept out by
/// hand where nothing is grounded. The cycle is that of a network with a little ground everywhere: inverting exponentially small rates as they are would
/// drown all other directions in rounding. Rates are formed as sums over links at the end, which keeps exponentially small ones, down to about
/// 1e-28 of the rates within the wells.
/// </remarks>
public sealed class SmallestModes
{
    private const int MostIterations = 80;
    private readonly GridNetwork finest;
    private readonly NetworkMultigrid multigrid;
    private readonly WorkerTeam team;
    private readonly bool floating;
    private readonly ConcurrentBag<NetworkMultigrid.Workspace> workspaces = [];

    /// <summary>Prepares.</summary>
    /// <param name="network">The network.</param>
    /// <param name="shift">Conductance to ground of the preconditioner, per weight: a rate well below those of interest that are not exponentially small.</param>
    /// <param name="team">Threads to use; results do not depend on their number.</param>
    /// <param name="coarsest">Largest number of cells on which the iteration starts.</param>
    public SmallestModes(GridNetwork network, double shift, WorkerTeam team, int coarsest = 1100)
    {
        ArgumentNullException.ThrowIfNull(network);
        ArgumentNullException.ThrowIfNull(team);
        finest = network;
        multigrid = new NetworkMultigrid(network.Grounded(Require.NotNegative(shift)), coarsest);
        floating = network.IsFloating;
        this.team = team;
    }

    /// <summary>Finds modes.</summary>
    /// <param name="number">How many, at least 1 and at most a quarter of the coarsest network's cells.</param>
    /// <param name="tolerance">Bound on a residual relative to √(λ·λ_last); the share of λ that is wrong is about its square.</param>
    /// <param name="cancellation">Stops between two iterations.</param>
    public NetworkModes Find(int number, double tolerance = 1e-6, CancellationToken cancellation = default)
    {
        Require.AtLeast(number, 1);
        var coarsest = multigrid.Networks[^1];
        var block = number + Math.Max(2, number / 4);
        block = Math.Min(block, coarsest.Count - 1);
        Require.That(number <= Math.Max(1, coarsest.Count / 4) && number <= block,
            $"number was {number}; it must be at most {Math.Max(1, coarsest.Count / 4)} on a grid of {finest.Count} cells.");
        var columns = new double[block][];
        for (var k = 0; k < block; k++)
            columns[k] = Start(coarsest, k);
        for (var level = multigrid.Networks.Count - 1; ; level--)
        {
            var solver = new Level(this, level, columns, number);
            // Coarser networks need not be solved better than they resemble the finest.
            var result = solver.Run(level == 0 ? tolerance : Math.Max(tolerance, 1e-3), cancellation);
            if (level == 0)
                return result;
            var finer = multigrid.Networks[level - 1];
            for (var k = 0; k < block; k++)
            {
                var fine = new double[finer.Count];
                multigrid.Interpolate(level - 1, columns[k], fine);
                columns[k] = fine;
            }
        }
    }

    // Products of low waves with something irregular on top, so that no mode is missed by symmetry.
    private static double[] Start(GridNetwork network, int k)
    {
        var values = new double[network.Count];
        var (p, q) = network.Ny == 1 ? (k + 1, 0) : Wave(k);
        for (var i = 0; i < values.Length; i++)
        {
            var x = (i % network.Nx + 0.5) / network.Nx;
            var y = (i / network.Nx + 0.5) / network.Ny;
            values[i] = Math.Cos(Math.PI * p * x) * Math.Cos(Math.PI * q * y) + 0.3 * Math.Sin(12.9898 * i + 78.233 * (k + 1));
        }

        return values;
    }

    private static (int P, int Q) Wave(int k)
    {
        // (1,0) (0,1) (2,0) (1,1) (0,2) …: by growing sum.
        var sum = 1;
        while (k > sum)
        {
            k -= sum + 1;
            sum++;
        }

        return (sum - k, k);
    }

    private NetworkMultigrid.Workspace Rent() => workspaces.TryTake(out var workspace) ? workspace : multigrid.NewWorkspace();

    /// <summary>The iteration on one network.</summary>
    private sealed class Level
    {
        // Cells worked on at once: all columns of a block fit the cache.
        private const int Chunk = 256;
        private readonly SmallestModes owner;
        private readonly int index;
        private readonly GridNetwork network;
        private readonly double[][] modes;
        private readonly double[][] searches;
        private readonly double[][] steps;
        private readonly int number;
        private readonly double[] rates;
        private readonly double[] residuals;
        private readonly double total;

        public Level(SmallestModes owner, int index, double[][] modes, int number)
        {
            this.owner = owner;
            this.index = index;
            this.modes = modes;
            this.number = number;
            network = index == 0 ? owner.finest : owner.multigrid.Networks[index];
            searches = new double[modes.Length][];
            steps = new double[modes.Length][];
            for (var k = 0; k < modes.Length; k++)
            {
                searches[k] = new double[network.Count];
                steps[k] = new double[network.Count];
            }

            rates = new double[modes.Length];
            residuals = new double[modes.Length];
            total = SpanKernels.Sum(network.Mass);
        }

        public NetworkModes Run(double tolerance, CancellationToken cancellation)
        {
            for (var k = 0; k < modes.Length; k++)
                RemoveMean(modes[k]);
            Project(modes.Length, 0, 0);
            var active = new bool[modes.Length];
            var withSteps = 0;
            var iteration = 0;
            bool converged;
            while (true)
            {
                cancellation.ThrowIfCancellationRequested();
                owner.team.Run(modes.Length, Residual);
                var last = rates[number - 1];
                converged = true;
                for (var k = 0; k < modes.Length; k++)
                {
                    active[k] = !(residuals[k] <= tolerance * Math.Sqrt(Math.Abs(rates[k] * last)));
                    converged &= k >= number || !active[k];
                }

                if (converged || iteration == MostIterations || double.IsNaN(last))
                    break;
                iteration++;
                // Searches and steps of the columns at work move to the front.
                var searching = 0;
                for (var k = 0; k < modes.Length; k++)
                {
                    if (!active[k])
                        continue;
                    (searches[searching], searches[k]) = (searches[k], searches[searching]);
                    (steps[searching], steps[k]) = (steps[k], steps[searching]);
                    searching++;
                }

                owner.team.Run(searching, Precondition);
                Project(modes.Length, searching, withSteps == 0 ? 0 : searching);
                withSteps = searching;
            }

            var order = Enumerable.Range(0, number).ToArray();
            var final = new double[number];
            for (var k = 0; k < number; k++)
            {
                Sign(modes[k]);
                final[k] = network.Energy(modes[k]) / MassSquare(modes[k]);
            }

            Array.Sort(final, order);
            return new NetworkModes(final, [.. order.Select(k => modes[k])], [.. order.Select(k => residuals[k])], iteration, converged);
        }

        // search ← Ku − λMu, and its norm.
        private void Residual(int k)
        {
            var (u, r) = (modes[k], searches[k]);
            network.Apply(u, r);
            var mass = network.Mass;
            var rate = Vector512.Create(rates[k]);
            var squares = Vector512<double>.Zero;
            // A weight of 0 leaves nothing to divide by; the tiniest number stands in for it.
            var tiny = Vector512.Create(1e-300);
            var i = 0;
            for (; i + 8 <= r.Length; i += 8)
            {
                var m = Vector512.Create<double>(mass.AsSpan(i, 8));
                var rest = Vector512.Create<double>(r.AsSpan(i, 8)) - rate * m * Vector512.Create<double>(u.AsSpan(i, 8));
                rest.CopyTo(r.AsSpan(i, 8));
                squares += rest * (rest / Vector512.Max(m, tiny));
            }

            var square = Sum(squares);
            for (; i < r.Length; i++)
            {
                r[i] -= rates[k] * mass[i] * u[i];
                square += r[i] * (r[i] / Math.Max(mass[i], 1e-300));
            }

            residuals[k] = Math.Sqrt(square);
        }

        private void Precondition(int k)
        {
            var workspace = owner.Rent();
            owner.multigrid.Apply(searches[k], searches[k], workspace, index);
            owner.workspaces.Add(workspace);
            RemoveMean(searches[k]);
        }

        private void RemoveMean(double[] values)
        {
            if (!owner.floating)
                return;
            var mean = SpanKernels.Dot(network.Mass, values) / total;
            var vectors = MemoryMarshal.Cast<double, Vector512<double>>(values.AsSpan());
            for (var i = 0; i < vectors.Length; i++)
                vectors[i] -= Vector512.Create(mean);
            for (var i = 8 * vectors.Length; i < values.Length; i++)
                values[i] -= mean;
        }

        private double MassSquare(double[] values)
        {
            var sum = 0.0;
            for (var i = 0; i < values.Length; i++)
                sum += network.Mass[i] * values[i] * values[i];
            return sum;
        }

        private void Sign(double[] values)
        {
            var (largest, at) = (0.0, 0);
            for (var i = 0; i < values.Length; i++)
            {
                var part = network.Mass[i] * values[i] * values[i];
                if (part > largest)
                    (largest, at) = (part, i);
            }

            SpanKernels.Scale(values, (values[at] < 0 ? -1 : 1) / Math.Sqrt(MassSquare(values)));
        }

        // Rayleigh-Ritz on the span of all modes, so many searches and so many steps; modes and steps are replaced.
        private void Project(int modeCount, int searching, int stepping)
        {
            var size = modeCount + searching + stepping;
            var columns = new double[size][];
            for (var k = 0; k < modeCount; k++)
                columns[k] = modes[k];
            for (var k = 0; k < searching; k++)
                columns[modeCount + k] = searches[k];
            for (var k = 0; k < stepping; k++)
                columns[modeCount + searching + k] = steps[k];
            var (energy, mass) = Grams(columns);
            var scale = new double[size];
            for (var i = 0; i < size; i++)
                scale[i] = mass[i * size + i] > 0 ? 1 / Math.Sqrt(mass[i * size + i]) : 0;
            for (var i = 0; i < size; i++)
            {
                for (var j = 0; j < size; j++)
                {
                    energy[i * size + j] *= scale[i] * scale[j];
                    mass[i * size + j] *= scale[i] * scale[j];
                }
            }

            // Directions that the columns share to rounding are left out.
            var (values, vectors) = (new double[size], new double[size * size]);
            SymmetricEigen.Decompose(mass, values, vectors);
            var kept = 0;
            var basis = new double[size * size];
            for (var k = 0; k < size; k++)
            {
                if (values[k] <= 1e-13)
                    continue;
                for (var i = 0; i < size; i++)
                    basis[kept * size + i] = vectors[k * size + i] / Math.Sqrt(values[k]);
                kept++;
            }

            var half = new double[kept * size];
            for (var a = 0; a < kept; a++)
            {
                for (var i = 0; i < size; i++)
                    half[a * size + i] = SpanKernels.Dot(energy.AsSpan(i * size, size), basis.AsSpan(a * size, size));
            }

            var reduced = new double[kept * kept];
            for (var a = 0; a < kept; a++)
            {
                for (var b = 0; b < kept; b++)
                    reduced[a * kept + b] = 0.5 * (SpanKernels.Dot(half.AsSpan(a * size, size), basis.AsSpan(b * size, size)) + SpanKernels.Dot(half.AsSpan(b * size, size), basis.AsSpan(a * size, size)));
            }

            var (ritz, rotation) = (new double[kept], new double[kept * kept]);
            SymmetricEigen.Decompose(reduced, ritz, rotation);
            var weights = new double[modeCount * size];
            for (var k = 0; k < modeCount; k++)
            {
                rates[k] = ritz[Math.Min(k, kept - 1)];
                for (var a = 0; a < kept && k < kept; a++)
                    SpanKernels.AddScaled(weights.AsSpan(k * size, size), rotation[k * kept + a], basis.AsSpan(a * size, size));
                for (var i = 0; i < size; i++)
                    weights[k * size + i] *= scale[i];
            }

            Combine(columns, weights, modeCount);
        }

        // New modes, and as new steps the part of them that came from searches and steps.
        private void Combine(double[][] columns, double[] weights, int modeCount)
        {
            var size = columns.Length;
            const int cellsPerBlock = 32 * Chunk;
            var targets = (double[][])modes.Clone();
            var stepTargets = (double[][])steps.Clone();
            owner.team.Run((network.Count + cellsPerBlock - 1) / cellsPerBlock, block =>
            {
                var buffer = new double[2 * modeCount * Chunk];
                var end = Math.Min(network.Count, (block + 1) * cellsPerBlock);
                for (var from = block * cellsPerBlock; from < end; from += Chunk)
                {
                    var length = Math.Min(Chunk, end - from);
                    Array.Clear(buffer);
                    for (var k = 0; k < modeCount; k++)
                    {
                        var part = buffer.AsSpan(2 * k * Chunk, length);
                        for (var i = modeCount; i < size; i++)
                            SpanKernels.AddScaled(part, weights[k * size + i], columns[i].AsSpan(from, length));
                        var whole = buffer.AsSpan((2 * k + 1) * Chunk, length);
                        part.CopyTo(whole);
                        for (var i = 0; i < modeCount; i++)
                            SpanKernels.AddScaled(whole, weights[k * size + i], columns[i].AsSpan(from, length));
                    }

                    for (var k = 0; k < modeCount; k++)
                    {
                        buffer.AsSpan(2 * k * Chunk, length).CopyTo(stepTargets[k].AsSpan(from));
                        buffer.AsSpan((2 * k + 1) * Chunk, length).CopyTo(targets[k].AsSpan(from));
                    }
                }
            });
        }

        // SᵀKS and SᵀMS, in blocks of rows that are added up in order.
        private (double[] Energy, double[] Mass) Grams(double[][] columns)
        {
            var size = columns.Length;
            var rowsPerBlock = Math.Max(1, 4096 / network.Nx);
            var blocks = (network.Ny + rowsPerBlock - 1) / rowsPerBlock;
            var partial = new double[blocks][];
            owner.team.Run(blocks, block =>
            {
                var sums = new double[2 * size * size];
                var applied = new double[size * network.Nx];
                var weighted = new double[size * network.Nx];
                for (var row = block * rowsPerBlock; row < Math.Min(network.Ny, (block + 1) * rowsPerBlock); row++)
                {
                    var from = row * network.Nx;
                    for (var k = 0; k < size; k++)
                    {
                        network.ApplyRow(columns[k], row, applied.AsSpan(k * network.Nx, network.Nx));
                        Multiply(network.Mass.AsSpan(from, network.Nx), columns[k].AsSpan(from, network.Nx), weighted.AsSpan(k * network.Nx, network.Nx));
                    }

                    for (var at = 0; at < network.Nx; at += Chunk)
                        AddProducts(columns, applied, weighted, from + at, at, Math.Min(Chunk, network.Nx - at), sums);
                }

                partial[block] = sums;
            });
            var (energy, mass) = (new double[size * size], new double[size * size]);
            foreach (var sums in partial)
            {
                SpanKernels.AddScaled(energy, 1, sums.AsSpan(0, size * size));
                SpanKernels.AddScaled(mass, 1, sums.AsSpan(size * size));
            }

            for (var a = 0; a < size; a++)
            {
                for (var b = 0; b < a; b++)
                {
                    energy[a * size + b] = energy[b * size + a];
                    mass[a * size + b] = mass[b * size + a];
                }
            }

            return (energy, mass);
        }

        // Upper triangles; two columns on the left and both products on the right at once keep the loads few.
        private void AddProducts(double[][] columns, double[] applied, double[] weighted, int from, int at, int length, double[] sums)
        {
            var size = columns.Length;
            for (var b = 0; b < size; b++)
            {
                ref var k = ref applied[b * network.Nx + at];
                ref var m = ref weighted[b * network.Nx + at];
                for (var a = 0; a <= b; a += 2)
                {
                    var pair = a + 1 <= b;
                    ref var u = ref columns[a][from];
                    ref var v = ref columns[pair ? a + 1 : a][from];
                    Vector512<double> ku = default, mu = default, kv = default, mv = default;
                    var i = 0;
                    for (; i + 8 <= length; i += 8)
                    {
                        var offset = (nuint)i;
                        var (x, y) = (Vector512.LoadUnsafe(ref u, offset), Vector512.LoadUnsafe(ref v, offset));
                        var (kx, mx) = (Vector512.LoadUnsafe(ref k, offset), Vector512.LoadUnsafe(ref m, offset));
                        ku = Vector512.FusedMultiplyAdd(x, kx, ku);
                        mu = Vector512.FusedMultiplyAdd(x, mx, mu);
                        kv = Vector512.FusedMultiplyAdd(y, kx, kv);
                        mv = Vector512.FusedMultiplyAdd(y, mx, mv);
                    }

                    var (sumKu, sumMu, sumKv, sumMv) = (Sum(ku), Sum(mu), Sum(kv), Sum(mv));
                    for (; i < length; i++)
                    {
                        var (x, y) = (columns[a][from + i], columns[pair ? a + 1 : a][from + i]);
                        var (kx, mx) = (applied[b * network.Nx + at + i], weighted[b * network.Nx + at + i]);
                        sumKu += x * kx;
                        sumMu += x * mx;
                        sumKv += y * kx;
                        sumMv += y * mx;
                    }

                    sums[a * size + b] += sumKu;
                    sums[size * size + a * size + b] += sumMu;
                    if (!pair)
                        continue;
                    sums[(a + 1) * size + b] += sumKv;
                    sums[size * size + (a + 1) * size + b] += sumMv;
                }
            }
        }

        private static void Multiply(ReadOnlySpan<double> a, ReadOnlySpan<double> b, Span<double> product)
        {
            var i = 0;
            for (; i + 8 <= product.Length; i += 8)
                (Vector512.Create(a.Slice(i, 8)) * Vector512.Create(b.Slice(i, 8))).CopyTo(product.Slice(i, 8));
            for (; i < product.Length; i++)
                product[i] = a[i] * b[i];
        }

        private static double Sum(Vector512<double> v)
        {
            var four = v.GetLower() + v.GetUpper();
            var two = four.GetLower() + four.GetUpper();
            return two[0] + two[1];
        }
    }
}
