using System.Runtime.CompilerServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Schemes.Splitting;

/// <summary>
/// Spreads point masses at arbitrary places over a grid, each as a normal density of given variance around its true place: transport and noise in one, without
/// moving mass to cell centres in between.
/// </summary>
/// <remarks>
/// The normal density is cut in two: each mass is spread with one part of the variance (weights made of two exponentials as in L. Greengard, J.-Y. Lee, SIAM Rev. 46 (2004) 443-454), and the rest is added by
/// <see cref="GaussianConvolution"/> on the grid. From 9 squared cells on the part spread is 1.15 with 16 weights an axis; below, as much as 24 weights hold. Mass and mean are exact, the variance is right to 1e-7 of the part spread at worst and 3e-9
/// on average over places; a single mass shows a ripple of at most 1e-7 of itself, which masses at many places average out. A variance below 1.15, which the grid cannot carry as a normal density, is spread with three weights
/// of the right mass and mean and, where three positive weights allow it, variance. Weights are positive and of sum 1. The result does not depend on the number of threads. Not safe for use from two threads at once.
/// </remarks>
internal sealed class GaussianSpreading
{
    /// <summary>Least variance, in squared cells, that the grid carries as a normal density.</summary>
    public const double LeastVariance = 1.15;

    private const double LeastRest = GaussianKernel.SampledFrom * GaussianKernel.SampledFrom;

    // What 24 weights hold: to six deviations, or well beyond when it is only a part.
    private const double WholeBelow = 3.4;
    private const double WidePart = 2.84;

    // From here on a part of 1.15 and the rest together are smooth on the grid: 1/(1/1.15 + 1/7.85) = 1.
    private const double NarrowFrom = 9;
    private const int Pad = 16;
    private const int StripRows = 32;
    private const double Nothing = 1e-280;

    private readonly int countX;
    private readonly int countY;
    private readonly int stride;
    private readonly int paddedRows;
    private readonly AxisWeights alongX;
    private readonly AxisWeights alongY;
    private readonly int[] firstColumn;
    private readonly int[] firstRow;
    private readonly double[] scaleX;
    private readonly double[] growthX;
    private readonly double[] scaleY;
    private readonly double[] growthY;
    private readonly int[] stripStart;
    private readonly int[] stripSources;
    private readonly double[] padded;
    private readonly int[] foldX;
    private readonly int[] foldRows;
    private readonly int[] foldRowStart;
    private readonly GaussianConvolution? rest;
    private readonly Action<int> spreadBlock;
    private readonly Action<int> foldBlock;
    private double[] masses = [];
    private double[] target = [];

    /// <summary>Prepares weights for masses at fixed places.</summary>
    /// <param name="countX">Cells along x.</param>
    /// <param name="countY">Cells along y; 1 on a line.</param>
    /// <param name="periodicX">Whether x wraps (otherwise its ends are mirrors).</param>
    /// <param name="periodicY">Whether y wraps.</param>
    /// <param name="varianceX">Variance along x in squared cells.</param>
    /// <param name="varianceY">Variance along y in squared cells.</param>
    /// <param name="placeX">Places along x, in cells from the centre of cell 0, inside the axis.</param>
    /// <param name="placeY">Places along y; empty on a line.</param>
    /// <param name="threads">The most threads that will be used.</param>
    public GaussianSpreading(
        int countX, int countY, bool periodicX, bool periodicY, double varianceX, double varianceY, double[] placeX, double[] placeY, int threads)
    {
        this.countX = countX;
        this.countY = countY;
        var line = placeY.Length == 0;
        var count = placeX.Length;
        alongX = new AxisWeights(varianceX);
        alongY = new AxisWeights(line ? double.NaN : varianceY);
        stride = (countX + 2 * Pad + 7) / 8 * 8;
        paddedRows = line ? 1 : countY + 2 * Pad;
        padded = new double[checked(stride * paddedRows)];
        firstColumn = new int[count];
        scaleX = new double[count];
        growthX = new double[count];
        firstRow = new int[line ? 0 : count];
        scaleY = new double[firstRow.Length];
        growthY = new double[firstRow.Length];
        for (var i = 0; i < count; i++)
        {
            firstColumn[i] = Pad + alongX.Prepare(placeX[i], out scaleX[i], out growthX[i]);
            if (!line)
                firstRow[i] = Pad + alongY.Prepare(placeY[i], out scaleY[i], out growthY[i]);
        }

        (stripStart, stripSources) = SortIntoStrips(count);
        foldX = new int[stride];
        for (var c = 0; c < stride; c++)
            foldX[c] = DensityInterpolation.Wrap(c - Pad, countX, periodicX);
        (foldRowStart, foldRows) = RowsThatFold(line, periodicY);
        if (alongX.RestVariance > 0 || alongY.RestVariance > 0)
            rest = new GaussianConvolution(countX, countY, periodicX, periodicY, alongX.RestVariance, line ? 0 : alongY.RestVariance, threads);
        spreadBlock = SpreadStrip;
        foldBlock = FoldRows;
    }

    /// <summary>Spreads the masses.</summary>
    /// <param name="source">One mass a place.</param>
    /// <param name="destination">Receives mass per cell, x fastest; may be <paramref name="source"/> itself when that is as long as the grid.</param>
    /// <param name="team">Threads.</param>
    public void Apply(double[] source, double[] destination, WorkerTeam team)
    {
        (masses, target) = (source, destination);
        team.Run(stripStart.Length - 1, spreadBlock);
        team.Run((countY + StripRows - 1) / StripRows, foldBlock);
        (masses, target) = ([], []);
        rest?.Apply(destination, destination, team);
    }

    // A mass belongs to every strip of padded rows that its weights touch, so that each strip can be written by one thread in the order of the masses.
    private (int[] Start, int[] Sources) SortIntoStrips(int count)
    {
        var strips = (paddedRows + StripRows - 1) / StripRows;
        var start = new int[strips + 1];
        for (var pass = 0; ; pass++)
        {
            var sources = pass == 0 ? [] : new int[start[strips]];
            var next = pass == 0 ? [] : start[..strips];
            for (var i = 0; i < count; i++)
            {
                var row = firstRow.Length == 0 ? 0 : firstRow[i];
                var last = (row + alongY.Taps - 1) / StripRows;
                for (var strip = row / StripRows; strip <= last; strip++)
                {
                    if (pass == 0)
                        start[strip + 1]++;
                    else
                        sources[next[strip]++] = i;
                }
            }

            if (pass == 1)
                return (start, sources);
            for (var strip = 0; strip < strips; strip++)
                start[strip + 1] += start[strip];
        }
    }

    private (int[] Start, int[] Rows) RowsThatFold(bool line, bool periodic)
    {
        if (line)
            return ([0, 1], [0]);
        var rows = new List<int>();
        var start = new int[countY + 1];
        for (var row = 0; row < countY; row++)
        {
            for (var p = 0; p < paddedRows; p++)
            {
                if (DensityInterpolation.Wrap(p - Pad, countY, periodic) == row)
                    rows.Add(p);
            }

            start[row + 1] = rows.Count;
        }

        return (start, [.. rows]);
    }

    private void SpreadStrip(int strip)
    {
        var top = strip * StripRows;
        var bottom = Math.Min(top + StripRows, paddedRows);
        padded.AsSpan(top * stride, (bottom - top) * stride).Clear();
        Span<double> weights = stackalloc double[24];
        weights[0] = 1;
        ref var grid = ref padded[0];
        var onLine = firstRow.Length == 0;
        for (var k = stripStart[strip]; k < stripStart[strip + 1]; k++)
        {
            var source = stripSources[k];
            var mass = masses[source];
            if (!(mass > Nothing))
                continue;
            var row = 0;
            if (!onLine)
            {
                row = firstRow[source];
                alongY.Write(scaleY[source], growthY[source], weights);
            }

            alongX.Write(mass * scaleX[source], growthX[source], mass, out var w0, out var w1, out var w2);
            var end = Math.Min(row + alongY.Taps, bottom);
            var from = Math.Max(row, top);
            ref var place = ref Unsafe.Add(ref grid, from * stride + firstColumn[source]);
            switch (alongX.Vectors)
            {
                case 1:
                    for (var r = from; r < end; r++)
                    {
                        var w = Vector512.Create(weights[r - row]);
                        Add(ref place, 0, w, w0);
                        place = ref Unsafe.Add(ref place, stride);
                    }

                    break;
                case 2:
                    for (var r = from; r < end; r++)
                    {
                        var w = Vector512.Create(weights[r - row]);
                        Add(ref place, 0, w, w0);
                        Add(ref place, 8, w, w1);
                        place = ref Unsafe.Add(ref place, stride);
                    }

                    break;
                default:
                    for (var r = from; r < end; r++)
                    {
                        var w = Vector512.Create(weights[r - row]);
                        Add(ref place, 0, w, w0);
                        Add(ref place, 8, w, w1);
                        Add(ref place, 16, w, w2);
                        place = ref Unsafe.Add(ref place, stride);
                    }

                    break;
            }
        }
    }

    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    private static void Add(ref double place, int offset, Vector512<double> weight, Vector512<double> values)
    {
        ref var at = ref Unsafe.Add(ref place, offset);
        Vector512.MultiplyAddEstimate(weight, values, Vector512.LoadUnsafe(ref at)).StoreUnsafe(ref at);
    }

    // What was spread beyond the ends comes back: mirrored at walls, from the other end on a circle.
    private void FoldRows(int block)
    {
        var end = Math.Min((block + 1) * StripRows, countY);
        for (var row = block * StripRows; row < end; row++)
        {
            var line = target.AsSpan(row * countX, countX);
            for (var k = foldRowStart[row]; k < foldRowStart[row + 1]; k++)
            {
                var from = padded.AsSpan(foldRows[k] * stride, stride);
                var body = from.Slice(Pad, countX);
                if (k == foldRowStart[row])
                    body.CopyTo(line);
                else
                    SpanKernels.AddScaled(line, 1, body);
                for (var c = 0; c < Pad; c++)
                    line[foldX[c]] += from[c];
                for (var c = Pad + countX; c < stride; c++)
                    line[foldX[c]] += from[c];
            }

            for (var c = 0; c < line.Length; c++)
            {
                // Numbers that have all but underflowed are slow to compute with and mean nothing.
                if (line[c] < Nothing)
                    line[c] = 0;
            }
        }
    }

    /// <summary>Weights along one axis.</summary>
    private sealed class AxisWeights
    {
        private readonly double spread;
        private readonly double[] shape = new double[24];
        private readonly Vector512<double> shape0;
        private readonly Vector512<double> shape1;
        private readonly Vector512<double> shape2;

        public AxisWeights(double variance)
        {
            if (double.IsNaN(variance))
            {
                Taps = 1;
                return;
            }

            if (variance < LeastVariance)
            {
                (Taps, Vectors) = (3, 1);
                spread = variance <= 0.75 ? variance : 0.5;
                RestVariance = variance - spread;
                return;
            }

            (Taps, Vectors) = variance < NarrowFrom ? (24, 3) : (16, 2);
            spread = variance < WholeBelow ? variance : variance < NarrowFrom ? Math.Min(WidePart, variance - LeastRest) : LeastVariance;
            RestVariance = variance < WholeBelow ? 0 : variance - spread;
            for (var k = 0; k < Taps; k++)
            {
                double distance = k - (Taps / 2 - 1);
                shape[k] = Math.Exp(-0.5 * distance * distance / spread);
            }

            shape0 = Vector512.Create<double>(shape.AsSpan(0, 8));
            shape1 = Vector512.Create<double>(shape.AsSpan(8, 8));
            shape2 = Vector512.Create<double>(shape.AsSpan(16, 8));
        }

        public int Taps { get; }

        public int Vectors { get; } = 1;

        public double RestVariance { get; }

        /// <summary>Finds the first cell of the weights and the two numbers that they are made of.</summary>
        public int Prepare(double place, out double scale, out double growth)
        {
            if (Taps == 3)
            {
                var nearest = (int)Math.Round(place);
                var offset = place - nearest;
                // Second moment about the middle cell; at least |offset|, or the weights would not be positive.
                var moment = Math.Max(spread + offset * offset, Math.Abs(offset));
                (scale, growth) = (0.5 * (moment - offset), 0.5 * (moment + offset));
                return nearest - 1;
            }

            // exp(−(m − f)²/2v) = exp(−f²/2v) · exp(f/v)^m · exp(−m²/2v), m = first … first + taps − 1.
            var cell = (int)Math.Floor(place);
            var fraction = place - cell;
            growth = Math.Exp(fraction / spread);
            var first = -(Taps / 2 - 1);
            var sum = 0.0;
            for (var k = 0; k < Taps; k++)
                sum += Math.Exp(-0.5 * (first + k - fraction) * (first + k - fraction) / spread);
            scale = Math.Exp(-0.5 * fraction * fraction / spread + first * fraction / spread) / sum;
            return cell + first;
        }

        /// <summary>Writes the weights times the mass in <paramref name="scale"/>.</summary>
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public void Write(double scale, double growth, double mass, out Vector512<double> w0, out Vector512<double> w1, out Vector512<double> w2)
        {
            if (Taps == 3)
            {
                w0 = Vector512.Create(scale, mass - scale - mass * growth, mass * growth, 0, 0, 0, 0, 0);
                w1 = w2 = default;
                return;
            }

            var squared = growth * growth;
            var fourth = squared * squared;
            var one = Vector512<double>.One;
            // 1, g, g², … g⁷ from the binary digits of the exponent.
            var powers = Vector512.ConditionalSelect(Vector512.Create(0L, -1, 0, -1, 0, -1, 0, -1).AsDouble(), Vector512.Create(growth), one)
                * Vector512.ConditionalSelect(Vector512.Create(0L, 0, -1, -1, 0, 0, -1, -1).AsDouble(), Vector512.Create(squared), one)
                * Vector512.ConditionalSelect(Vector512.Create(0L, 0, 0, 0, -1, -1, -1, -1).AsDouble(), Vector512.Create(fourth), one)
                * Vector512.Create(scale);
            w0 = powers * shape0;
            var eighth = Vector512.Create(fourth * fourth);
            powers *= eighth;
            w1 = powers * shape1;
            w2 = Vectors == 3 ? powers * eighth * shape2 : default;
        }

        /// <summary>Writes the weights.</summary>
        [MethodImpl(MethodImplOptions.AggressiveInlining)]
        public void Write(double scale, double growth, Span<double> weights)
        {
            Write(scale, growth, 1, out var w0, out var w1, out var w2);
            ref var first = ref weights[0];
            w0.StoreUnsafe(ref first);
            if (Taps == 3)
                return;
            w1.StoreUnsafe(ref first, 8);
            if (Vectors == 3)
                w2.StoreUnsafe(ref first, 16);
        }
    }
}
