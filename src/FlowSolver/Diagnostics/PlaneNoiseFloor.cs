using System.Collections.Concurrent;
using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Transport;

namespace FlowSolver.Diagnostics;

/// <summary>
/// Noise floors in the plane: the law of the distance between N independent draws of a density and the density, by simulation.
/// </summary>
/// <remarks>
/// The statistic is the linearised Wasserstein-2 distance of the counts by cell (<see cref="PlaneSampleDistance"/>), the number that
/// <see cref="PlaneTransport.BetweenSamples"/> gives for an ensemble near the density. Since the same statistic is simulated for draws of the same size, a p-value from it is
/// exact up to the number of draws, whatever the linearisation does to the distance itself. Counts are drawn cell by cell with an alias table (A. Walker, ACM Trans. Math. Softw. 3 (1977) 253-256; M. Vose,
/// IEEE Trans. Softw. Eng. 17 (1991) 972-975). The same seed gives the same distances at any number of threads.
/// </remarks>
public static class PlaneNoiseFloor
{
    private const uint Purpose = 0x4E464C32;

    /// <summary>Simulates.</summary>
    /// <param name="density">The law to draw from and to compare with, on a plane grid.</param>
    /// <param name="count">N, samples in each draw; at least 1.</param>
    /// <param name="draws">Number of draws; at least 1.</param>
    /// <param name="seed">Seed; the numbers are independent of those of an ensemble with the same seed.</param>
    /// <param name="team">Threads to use; the result does not depend on their number.</param>
    /// <param name="cancellation">Stops between two draws.</param>
    /// <exception cref="ArgumentException">The density is not a plane one with mass, or a count is below 1.</exception>
    /// <exception cref="OperationCanceledException">Cancelled.</exception>
    public static NoiseFloor Simulate(Density density, int count, int draws, ulong seed, WorkerTeam team, CancellationToken cancellation = default)
    {
        ArgumentNullException.ThrowIfNull(density);
        ArgumentNullException.ThrowIfNull(team);
        Require.AtLeast(count, 1);
        Require.AtLeast(draws, 1);
        Require.That(density.Grid.Dimension == 2, "The density was on a line; it must be on a plane grid.");
        Require.That(density.Mass > 0, "The density had no mass; it must have some.");
        var law = density.Normalised();
        var table = new AliasTable(law.Values);
        var found = new double[draws];
        // Working memory goes from draw to draw; it carries nothing over.
        var idle = new ConcurrentBag<(PlaneSampleDistance Distance, double[] Counts, double[] Numbers)>();
        team.Run(draws, draw =>
        {
            cancellation.ThrowIfCancellationRequested();
            if (!idle.TryTake(out var tools))
                tools = (new PlaneSampleDistance(law, count, WorkerTeam.Alone), new double[law.Values.Length], new double[4096]);
            table.Draw(new UniformDraws(seed, Purpose, (uint)draw), count, tools.Counts, tools.Numbers);
            found[draw] = tools.Distance.OfCounts(tools.Counts);
            idle.Add(tools);
        });
        return new NoiseFloor(found);
    }

    private sealed class AliasTable
    {
        private readonly double[] threshold;
        private readonly int[] alias;

        public AliasTable(double[] weights)
        {
            var cells = weights.Length;
            threshold = new double[cells];
            alias = new int[cells];
            var scale = cells / SpanKernels.Sum(weights);
            var (small, large) = (new Stack<int>(), new Stack<int>());
            for (var i = 0; i < cells; i++)
            {
                threshold[i] = weights[i] * scale;
                alias[i] = i;
                (threshold[i] < 1 ? small : large).Push(i);
            }

            while (small.Count > 0 && large.Count > 0)
            {
                var (less, more) = (small.Pop(), large.Pop());
                alias[less] = more;
                threshold[more] -= 1 - threshold[less];
                (threshold[more] < 1 ? small : large).Push(more);
            }

            // Rounding leaves some; they are full.
            foreach (var i in small)
                threshold[i] = 1;
            foreach (var i in large)
                threshold[i] = 1;
        }

        public void Draw(UniformDraws stream, int count, double[] counts, double[] numbers)
        {
            Array.Clear(counts);
            for (var done = 0; done < count; done += numbers.Length)
            {
                var part = numbers.AsSpan(0, Math.Min(numbers.Length, count - done));
                stream.Fill((ulong)done, part);
                foreach (var u in part)
                {
                    var place = u * threshold.Length;
                    var cell = (int)place;
                    counts[place - cell < threshold[cell] ? cell : alias[cell]]++;
                }
            }
        }
    }
}
