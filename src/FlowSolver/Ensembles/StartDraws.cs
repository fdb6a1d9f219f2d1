using FlowSolver.Ensembles.RandomStreams;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Ensembles;

/// <summary>Draws walkers from a start density, exactly: from the density itself, not from its cells.</summary>
/// <remarks>
/// <list type="bullet">
/// <item>A normal density: normal numbers, wrapped on a circle; what falls outside a wall is drawn again, so that the law is the density cut off
/// at the wall and normalised. Where less than a twentieth of the draws would stay, it is drawn like a function.</item>
/// <item>A function f: cells of a fine internal table are chosen by their upper bounds of f, a uniform point in the cell is kept with probability
/// f/bound (rejection, J. von Neumann 1951). The bound of a cell is the largest of nine values along each axis, ends included, raised by a
/// quarter; when a draw finds f above it, the bound is raised and all walkers are drawn anew, so that no draw is ever made under a bound that
/// was seen to fail.</item>
/// <item>Samples: those outside the walls are left out. When as many stay as there are walkers they are used as they are, in their order;
/// otherwise walkers are drawn from them with replacement.</item>
/// </list>
/// Walker i depends on the seed and on i only, not on the number of threads.
/// </remarks>
public static class StartDraws
{
    private const int Tile = 512;
    private const int TilesOfBlock = 32;
    private const double LeastShareForRejection = 0.05;
    private const int MostAttempts = 4000;
    private const uint PurposeX = StreamPurpose.Start;
    private const uint PurposeY = StreamPurpose.Start + 1;
    private const uint PurposeCell = StreamPurpose.Start + 2;
    private const uint PurposeAccept = StreamPurpose.Start + 3;
    private const uint PurposeTrial = StreamPurpose.Start + 4;

    /// <summary>Draws walkers.</summary>
    /// <param name="start">The density.</param>
    /// <param name="domain">Where walkers can be.</param>
    /// <param name="seed">Seed.</param>
    /// <param name="x">Receives first coordinates.</param>
    /// <param name="y">Receives second coordinates; of the same length, or empty in one dimension.</param>
    /// <param name="team">Threads to use.</param>
    /// <exception cref="InputException">The start has no mass on the domain, or a function is negative or not finite where it was looked at.</exception>
    public static void Fill(StartDensity start, Domain domain, ulong seed, Span<double> x, Span<double> y, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(start);
        ArgumentNullException.ThrowIfNull(domain);
        ArgumentNullException.ThrowIfNull(team);
        Require.Length(y.Length, domain.Dimension == 2 ? x.Length : 0);
        // Blocks run on other threads, where spans cannot go: fill arrays, then copy.
        var targetX = new double[x.Length];
        var targetY = new double[y.Length];
        switch (start)
        {
            case GaussianStart gaussian:
                FillGaussian(gaussian, domain, seed, targetX, targetY, team);
                break;
            case FunctionStart function:
                FillFunction(function.Function, function.Text, domain, seed, targetX, targetY, team);
                break;
            case SamplesStart samples:
                FillSamples(samples, domain, seed, targetX, targetY);
                break;
            default:
                throw new ArgumentException($"The start was a {start.GetType().Name}; it must be one of the kinds in FlowSolver.Problems.");
        }

        targetX.CopyTo(x);
        targetY.CopyTo(y);
    }

    private static void ForBlocks(int count, WorkerTeam team, Action<int, int> job)
        => team.Run((count + Tile * TilesOfBlock - 1) / (Tile * TilesOfBlock), block =>
        {
            var end = Math.Min(count, (block + 1) * Tile * TilesOfBlock);
            for (var first = block * Tile * TilesOfBlock; first < end; first += Tile)
                job(first, Math.Min(Tile, end - first));
        });

    private static void FillGaussian(GaussianStart start, Domain domain, ulong seed, double[] x, double[] y, WorkerTeam team)
    {
        var deviationX = Math.Sqrt(start.VarianceX);
        var slope = start.Covariance / deviationX;
        var deviationY = domain.Dimension == 2 ? Math.Sqrt(Math.Max(0, start.VarianceY - slope * slope)) : 0;
        if (ShareInside(start, domain, deviationX, slope, deviationY) < LeastShareForRejection)
        {
            FillFunction(CutNormal(start, domain), start.Description, domain, seed, x, y, team);
            return;
        }

        ForBlocks(x.Length, team, (first, count) =>
        {
            Span<double> a = stackalloc double[1];
            Span<double> b = stackalloc double[1];
            var partX = x.AsSpan(first, count);
            var partY = y.Length > 0 ? y.AsSpan(first, count) : [];
            new NormalDraws(seed, PurposeX).Fill((ulong)first, partX);
            new NormalDraws(seed, PurposeY).Fill((ulong)first, partY);
            for (var i = 0; i < count; i++)
            {
                (a[0], b[0]) = (partX[i], partY.Length > 0 ? partY[i] : 0);
                for (uint attempt = 1; !Place(start, domain, deviationX, slope, deviationY, ref a[0], ref b[0]); attempt++)
                {
                    new NormalDraws(seed, PurposeX, attempt).Fill((ulong)(first + i), a);
                    if (partY.Length > 0)
                        new NormalDraws(seed, PurposeY, attempt).Fill((ulong)(first + i), b);
                }

                partX[i] = a[0];
                if (partY.Length > 0)
                    partY[i] = b[0];
            }
        });
    }

    // Turns two standard normal numbers into a point; false when it lies outside a wall.
    private static bool Place(GaussianStart start, Domain domain, double deviationX, double slope, double deviationY, ref double a, ref double b)
    {
        var positionX = start.MeanX + deviationX * a;
        var positionY = start.MeanY + slope * a + deviationY * b;
        a = domain.X.Ends == AxisEnds.Periodic ? domain.X.Fold(positionX) : positionX;
        if (domain.Y is null)
            return domain.X.Contains(a);
        b = domain.Y.Ends == AxisEnds.Periodic ? domain.Y.Fold(positionY) : positionY;
        return domain.X.Contains(a) && domain.Y.Contains(b);
    }

    private static double ShareInside(GaussianStart start, Domain domain, double deviationX, double slope, double deviationY)
    {
        const int trials = 4096;
        var a = new double[trials];
        var b = new double[trials];
        // A trial under its own numbers, the same for every seed: it only chooses between two exact ways.
        new NormalDraws(0, PurposeTrial, 0).Fill(0, a);
        new NormalDraws(0, PurposeTrial, 1).Fill(0, b);
        var inside = 0;
        for (var i = 0; i < trials; i++)
        {
            if (Place(start, domain, deviationX, slope, deviationY, ref a[i], ref b[i]))
                inside++;
        }

        return (double)inside / trials;
    }

    // The normal density up to a factor, scaled to 1 at its largest value on the domain's box, so that far tails do not underflow.
    private static BatchFunction CutNormal(GaussianStart start, Domain domain)
    {
        var determinant = domain.Y is null ? start.VarianceX : start.VarianceX * start.VarianceY - start.Covariance * start.Covariance;
        var (pxx, pxy, pyy) = domain.Y is null
            ? (1 / start.VarianceX, 0.0, 0.0)
            : (start.VarianceY / determinant, -start.Covariance / determinant, start.VarianceX / determinant);
        double Exponent(double px, double py)
        {
            var dx = px - start.MeanX;
            var dy = py - start.MeanY;
            return -0.5 * (pxx * dx * dx + 2 * pxy * dx * dy + pyy * dy * dy);
        }

        // Concave on a box: the largest value lies at the mean's projection, found by alternating over the axes.
        var (bestX, bestY) = (Nearest(domain.X, start.MeanX), domain.Y is null ? 0 : Nearest(domain.Y, start.MeanY));
        for (var sweep = 0; sweep < 200 && domain.Y is not null; sweep++)
        {
            bestX = Nearest(domain.X, start.MeanX - pxy / pxx * (bestY - start.MeanY));
            bestY = Nearest(domain.Y, start.MeanY - pxy / pyy * (bestX - start.MeanX));
        }

        var top = Exponent(bestX, bestY);
        return (px, py, value) =>
        {
            for (var i = 0; i < px.Length; i++)
                value[i] = Math.Exp(Exponent(px[i], py.Length > 0 ? py[i] : 0) - top);
        };
    }

    private static double Nearest(Interval interval, double position) => Math.Clamp(position, interval.From, interval.To);

    private static void FillSamples(SamplesStart samples, Domain domain, ulong seed, double[] x, double[] y)
    {
        Require.That(samples.X.Length > 0, "The list of start samples was empty; it must hold at least one.");
        Require.That(samples.Y is null == domain.Y is null, "Start samples and domain differ in dimension; they must agree.");
        var keptX = new List<double>(samples.X.Length);
        var keptY = new List<double>(domain.Y is null ? 0 : samples.X.Length);
        for (var k = 0; k < samples.X.Length; k++)
        {
            var px = domain.X.Ends == AxisEnds.Periodic ? domain.X.Fold(samples.X[k]) : samples.X[k];
            var py = domain.Y is null ? 0 : domain.Y.Ends == AxisEnds.Periodic ? domain.Y.Fold(samples.Y![k]) : samples.Y![k];
            if (!domain.X.Contains(px) || (domain.Y is not null && !domain.Y.Contains(py)))
                continue;
            keptX.Add(px);
            if (domain.Y is not null)
                keptY.Add(py);
        }

        if (keptX.Count == 0)
            throw NoMass();
        var words = new ulong[Tile];
        for (var first = 0; first < x.Length; first += Tile)
        {
            var count = Math.Min(Tile, x.Length - first);
            new StreamKey(seed, PurposeCell).FillBits((ulong)first, words.AsSpan(0, count));
            for (var i = 0; i < count; i++)
            {
                var chosen = keptX.Count == x.Length ? first + i : (int)Math.BigMul(words[i], (ulong)keptX.Count, out _);
                x[first + i] = keptX[chosen];
                if (y.Length > 0)
                    y[first + i] = keptY[chosen];
            }
        }
    }

    private static InputException NoMass() => new(new InputFault(
        "The start density has no mass on the domain; it must be above 0 somewhere inside.", "Move the start or widen the domain.", Key: "start"));

    private static void FillFunction(BatchFunction function, string text, Domain domain, ulong seed, double[] x, double[] y, WorkerTeam team)
    {
        var table = new BoundTable(function, text, domain, team);
        while (true)
        {
            table.Accumulate();
            // A violated bound makes every draw so far suspect: raise it and start over. Rare, and the outcome does not depend on threads,
            // because all violations of a pass are gathered before the next one.
            ForBlocks(x.Length, team, (first, count) => table.Draw(seed, first, x.AsSpan(first, count), y.Length > 0 ? y.AsSpan(first, count) : []));
            if (!table.RaiseViolatedBounds())
                return;
        }
    }

    // Upper bounds of a function, cell by cell, and draws under them.
    private sealed class BoundTable
    {
        private const int Cells1 = 4096;
        private const int Cells2 = 256;
        private const int Probes1 = 9;
        private const int Probes2 = 5;
        private const double Margin = 1.25;
        private readonly BatchFunction function;
        private readonly string text;
        private readonly Domain domain;
        private readonly int nx;
        private readonly int ny;
        private readonly double[] bound;
        private readonly double[] found;
        private readonly double[] cumulative;

        public BoundTable(BatchFunction function, string text, Domain domain, WorkerTeam team)
        {
            (this.function, this.text, this.domain) = (function, text, domain);
            nx = domain.Y is null ? Cells1 : Cells2;
            ny = domain.Y is null ? 1 : Cells2;
            bound = new double[nx * ny];
            found = new double[nx * ny];
            cumulative = new double[nx * ny];
            team.Run(ny, ProbeRow);
            var largest = SpanKernels.MaxAbs(bound);
            if (!(largest > 0))
                throw NoMass();
            for (var i = 0; i < bound.Length; i++)
                bound[i] *= Margin;
        }

        public void Accumulate()
        {
            var sum = 0.0;
            for (var i = 0; i < bound.Length; i++)
            {
                sum += bound[i];
                cumulative[i] = sum;
            }
        }

        public bool RaiseViolatedBounds()
        {
            var any = false;
            for (var i = 0; i < bound.Length; i++)
            {
                if (!(found[i] > bound[i]))
                    continue;
                bound[i] = Margin * found[i];
                any = true;
            }

            return any;
        }

        public void Draw(ulong seed, int first, Span<double> x, Span<double> y)
        {
            Span<int> waiting = stackalloc int[Tile];
            Span<int> cell = stackalloc int[Tile];
            Span<double> pointX = stackalloc double[Tile];
            Span<double> pointY = stackalloc double[Tile];
            Span<double> value = stackalloc double[Tile];
            Span<double> number = stackalloc double[Tile];
            Span<double> chance = stackalloc double[Tile];
            var count = x.Length;
            for (var i = 0; i < count; i++)
                waiting[i] = i;
            for (uint attempt = 0; count > 0; attempt++)
            {
                if (attempt >= MostAttempts)
                    throw new InputException(new InputFault($"The start density \"{text}\" is too uneven to draw from within cells of 1/{nx} of the domain.", "Use a wider start or a smaller domain.", Key: "start.density"));
                FillWaiting(new UniformDraws(seed, PurposeCell, attempt), first, waiting[..count], number);
                for (var i = 0; i < count; i++)
                    cell[i] = CellAt(number[i]);
                FillWaiting(new UniformDraws(seed, PurposeX, attempt), first, waiting[..count], number);
                for (var i = 0; i < count; i++)
                    pointX[i] = PointIn(domain.X, nx, cell[i] % nx, number[i]);
                if (domain.Y is not null)
                {
                    FillWaiting(new UniformDraws(seed, PurposeY, attempt), first, waiting[..count], number);
                    for (var i = 0; i < count; i++)
                        pointY[i] = PointIn(domain.Y, ny, cell[i] / nx, number[i]);
                }

                function(pointX[..count], domain.Y is null ? [] : pointY[..count], value[..count]);
                FillWaiting(new UniformDraws(seed, PurposeAccept, attempt), first, waiting[..count], chance);
                var left = 0;
                for (var i = 0; i < count; i++)
                {
                    if (!(value[i] >= 0) || !double.IsFinite(value[i]))
                        throw BadValue(pointX[i], domain.Y is null ? null : pointY[i], value[i]);
                    if (value[i] > bound[cell[i]])
                        Record(cell[i], value[i]);
                    if (chance[i] * bound[cell[i]] >= value[i])
                    {
                        waiting[left++] = waiting[i];
                        continue;
                    }

                    x[waiting[i]] = pointX[i];
                    if (domain.Y is not null)
                        y[waiting[i]] = pointY[i];
                }

                count = left;
            }
        }

        // The first attempt serves all walkers of the tile at once; later ones only those that wait.
        private static void FillWaiting(UniformDraws draws, int first, ReadOnlySpan<int> waiting, Span<double> numbers)
        {
            if (waiting.Length > 64)
            {
                Span<double> all = stackalloc double[Tile];
                var span = waiting[^1] + 1;
                draws.Fill((ulong)first, all[..span]);
                for (var i = 0; i < waiting.Length; i++)
                    numbers[i] = all[waiting[i]];
                return;
            }

            for (var i = 0; i < waiting.Length; i++)
                draws.Fill((ulong)(first + waiting[i]), numbers.Slice(i, 1));
        }

        private void Record(int cell, double value)
        {
            lock (found)
                found[cell] = Math.Max(found[cell], value);
        }

        private int CellAt(double number)
        {
            var target = number * cumulative[^1];
            var place = Array.BinarySearch(cumulative, target);
            place = place < 0 ? ~place : place + 1;
            return Math.Min(place, cumulative.Length - 1);
        }

        private static double PointIn(Interval interval, int cells, int cell, double number)
            => Math.Clamp(interval.From + (cell + number) * (interval.Length / cells), interval.From, interval.To);

        private void ProbeRow(int row)
        {
            var probesX = domain.Y is null ? Probes1 : Probes2;
            var probesY = domain.Y is null ? 1 : Probes2;
            var x = new double[nx];
            var y = domain.Y is null ? [] : new double[nx];
            var value = new double[nx];
            for (var b = 0; b < probesY; b++)
            {
                if (domain.Y is not null)
                    Array.Fill(y, PointIn(domain.Y, ny, row, (double)b / (probesY - 1)));
                for (var a = 0; a < probesX; a++)
                {
                    for (var i = 0; i < nx; i++)
                        x[i] = PointIn(domain.X, nx, i, (double)a / (probesX - 1));
                    function(x, y, value);
                    for (var i = 0; i < nx; i++)
                    {
                        // Values at the very ends of the domain may be infinite without harm (a root's slope, say): only draws are judged there.
                        if (value[i] < 0 || (!double.IsFinite(value[i]) && a > 0 && a < probesX - 1))
                            throw BadValue(x[i], domain.Y is null ? null : y[i], value[i]);
                        if (double.IsFinite(value[i]))
                            bound[row * nx + i] = Math.Max(bound[row * nx + i], value[i]);
                    }
                }
            }
        }

        private InputException BadValue(double x, double? y, double value)
        {
            var place = FormattableString.Invariant($"x = {x}") + (y is { } py ? FormattableString.Invariant($", y = {py}") : "");
            var shown = double.IsNaN(value) ? "not a number" : FormattableString.Invariant($"{value}");
            return new InputException(new InputFault(
                $"The start density \"{text}\" was {shown} at {place}; it must be finite and not negative on the whole domain.",
                "Change the formula or the domain.", Key: "start.density"));
        }
    }
}
