namespace FlowSolver.Foundation;

/// <summary>
/// The slowest rates and modes of a reversible chain of n states, open or closed to a ring, each to nearly full relative accuracy: also a rate of
/// 1e-200 beside others of order 1.
/// </summary>
/// <remarks>
/// With jump rates f_i (from i to i + 1) and b_i (back), the rates are the eigenvalues of u ↦ −Σ_j r_ij (u_j − u_i). They are counted below σ by the
/// signs of the pivots of the factored matrix, d_i = f_i + s_i with s_0 = −σ and s_(i+1) = b_i s_i/d_i − σ, which is the differential
/// quotient-difference recurrence: it never subtracts numbers of one sign and size before a sign change, so that bisection finds each rate to its own
/// digits (B. N. Parlett, I. S. Dhillon, Linear Algebra Appl. 309 (2000) 121-151, from memory; J. Demmel, W. Kahan, SIAM J. Sci. Stat. Comput. 11 (1990) 873-912).
/// A ring is cut at its last state, whose own pivot is formed without cancelling from the mean times to reach it. Modes of an open chain come from the
/// recurrences from both ends, joined where the residual is least (twisted factorisation, same source); those of a ring from inverse iteration.
/// </remarks>
public sealed class ChainSpectrum
{
    // States below this weight hold nothing that double precision could tell.
    private const double Nothing = 1e-290;
    private readonly double[] forward;
    private readonly double[] back;
    private readonly double[] weights;
    private readonly int count;
    private readonly bool closed;

    /// <summary>States the chain.</summary>
    /// <param name="forward">Rates from state i to i + 1; the last one leads to the first state, or is 0 for an open chain.</param>
    /// <param name="back">Rates from state i + 1 to i; the last one leads from the first state to the last, or is 0.</param>
    /// <param name="weights">Weights of the stationary law, in balance with the rates, of sum 1; length n ≥ 3.</param>
    /// <exception cref="ArgumentException">The lengths differ, or a rate between neighbours is not above 0.</exception>
    public ChainSpectrum(ReadOnlySpan<double> forward, ReadOnlySpan<double> back, ReadOnlySpan<double> weights)
    {
        Require.AtLeast(weights.Length, 3);
        Require.Length(forward.Length, weights.Length);
        Require.Length(back.Length, weights.Length);
        this.forward = forward.ToArray();
        this.back = back.ToArray();
        this.weights = weights.ToArray();
        count = weights.Length;
        closed = forward[^1] > 0;
        for (var i = 0; i < count - 1; i++)
        {
            // A rate that underflowed cuts the chain; the least normal number keeps the recurrences going and changes no other rate.
            this.forward[i] = Math.Max(this.forward[i], 1e-300);
            this.back[i] = Math.Max(this.back[i], 1e-300);
        }
    }

    /// <summary>The smallest rates above the zero of equilibrium, in increasing order.</summary>
    /// <param name="number">How many, from 1 to n − 1.</param>
    /// <param name="team">Threads to use.</param>
    public double[] Smallest(int number, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(team);
        Require.AtLeast(number, 1);
        Require.That(number < count, $"number was {number}; it must be below the number of states ({count}).");
        var bound = 0.0;
        for (var i = 0; i < count; i++)
            bound = Math.Max(bound, 2 * (forward[i] + back[i == 0 ? count - 1 : i - 1]));
        var rates = new double[number];
        team.Run(number, k => rates[k] = Bisect(k + 1, bound));
        return rates;
    }

    // The rate with index k, counted from the zero: first by halving its logarithm, then itself.
    private double Bisect(int k, double high)
    {
        var scratch = closed ? new double[2 * count] : [];
        var low = 1e-290 * high;
        if (CountBelow(low, scratch) > k)
            return 0;
        while (high > 2 * low)
        {
            var middle = Math.Sqrt(low) * Math.Sqrt(high);
            if (CountBelow(middle, scratch) > k)
                high = middle;
            else
                low = middle;
        }

        while (high - low > 2e-16 * high)
        {
            var middle = 0.5 * (low + high);
            if (middle <= low || middle >= high)
                break;
            if (CountBelow(middle, scratch) > k)
                high = middle;
            else
                low = middle;
        }

        return 0.5 * (low + high);
    }

    private int CountBelow(double shift, Span<double> scratch)
    {
        if (closed)
            return CountBelowOnRing(shift, scratch[..count], scratch[count..]);
        var below = 0;
        var s = -shift;
        for (var i = 0; i < count - 1; i++)
        {
            var d = Pivot(forward[i] + s);
            if (d < 0)
                below++;
            s = back[i] * (s / d) - shift;
        }

        return s < 0 ? below + 1 : below;
    }

    private int CountBelowOnRing(double shift, Span<double> pivots, Span<double> times)
    {
        // States 0 … n − 2 with the last one cut out: both its neighbours lose rate to it.
        var inner = count - 1;
        var below = 0;
        var s = back[inner] - shift;
        times[0] = 1;
        for (var i = 0; i < inner; i++)
        {
            var d = Pivot(forward[i] + s);
            pivots[i] = d;
            if (d < 0)
                below++;
            if (i == inner - 1)
                break;
            times[i + 1] = 1 + back[i] * (times[i] / d);
            s = back[i] * (s / d) - shift;
        }

        // Solutions of (−A − σ)x = 1 on them; the last pivot is −σ(1 + rates to them · x).
        var last = times[inner - 1] / pivots[inner - 1];
        var x = last;
        for (var i = inner - 2; i >= 0; i--)
            x = (times[i] + forward[i] * x) / pivots[i];
        return 1 + forward[inner] * x + back[inner - 1] * last > 0 ? below + 1 : below;
    }

    // The recurrence survives a zero as a tiny number.
    private static double Pivot(double d) => d == 0 ? 1e-300 : d;

    /// <summary>
    /// The mode of each rate as a function of the state (relative to the stationary law): Σ w u² = 1, Σ w u = 0,
    /// positive where it carries most weight.
    /// </summary>
    /// <param name="rates">Rates that <see cref="Smallest"/> returned.</param>
    public double[][] Modes(ReadOnlySpan<double> rates)
    {
        var modes = new double[rates.Length][];
        for (var k = 0; k < modes.Length; k++)
        {
            modes[k] = closed ? RingMode(rates, k) : OpenMode(rates[k]);
            // On a ring rates may be double, and neighbours by a hair share digits between their modes: any basis serves that is orthogonal.
            for (var j = 0; j < k; j++)
            {
                if (Math.Abs(rates[j] - rates[k]) <= 1e-3 * rates[k])
                {
                    Normalise(modes[k]);
                    RemoveShare(modes[k], modes[j]);
                }
            }

            Normalise(modes[k]);
        }

        return modes;
    }

    private double[] OpenMode(double rate)
    {
        var (fromLeft, fromRight) = (new double[count], new double[count]);
        var (pivotLeft, pivotRight) = (new double[count], new double[count]);
        var s = -rate;
        for (var i = 0; i < count; i++)
        {
            fromLeft[i] = s;
            if (i == count - 1)
                break;
            pivotLeft[i] = Pivot(forward[i] + s);
            s = back[i] * (s / pivotLeft[i]) - rate;
        }

        s = -rate;
        for (var i = count - 1; i >= 0; i--)
        {
            fromRight[i] = s;
            if (i == 0)
                break;
            pivotRight[i] = Pivot(back[i - 1] + s);
            s = forward[i - 1] * (s / pivotRight[i]) - rate;
        }

        // The inverse of this pivot is the weight of the mode in state i over its distance from the rate given: least where the mode is largest.
        var join = 0;
        var least = double.PositiveInfinity;
        for (var i = 0; i < count; i++)
        {
            var residual = Math.Abs(fromLeft[i] + fromRight[i] + rate);
            if (residual < least)
                (join, least) = (i, residual);
        }

        // States that hold nothing follow their neighbour: products of ratios would run out of range there.
        var mode = new double[count];
        mode[join] = 1;
        for (var i = join - 1; i >= 0; i--)
            mode[i] = weights[i] < Nothing ? mode[i + 1] : forward[i] / pivotLeft[i] * mode[i + 1];
        for (var i = join + 1; i < count; i++)
            mode[i] = weights[i] < Nothing ? mode[i - 1] : back[i - 1] / pivotRight[i] * mode[i - 1];
        return mode;
    }

    // Inverse iteration beside the rate.
    private double[] RingMode(ReadOnlySpan<double> rates, int k)
    {
        var shift = rates[k] * (1 - 1e-9);
        var mode = new double[count];
        for (var i = 0; i < count; i++)
            mode[i] = Math.Sin(1.7 + 0.9 * i * (k + 1.3)) + Math.Cos(6.283185307179586 * (k / 2 + 1) * i / count + 0.4 * k);
        var (pivots, right) = (new double[count], new double[count]);
        for (var pass = 0; pass < 4; pass++)
        {
            RemoveMean(mode);
            SolveOnRing(shift, mode, pivots, right);
            RemoveMean(mode);
            var largest = SpanKernels.MaxAbs(mode);
            SpanKernels.Scale(mode, 1 / largest);
        }

        return mode;
    }

    // (−A − σ)x = source, in place: states 0 … n − 2 for the source and for what the last state sends, then the last state.
    private void SolveOnRing(double shift, double[] source, double[] pivots, double[] response)
    {
        var inner = count - 1;
        var s = back[inner] - shift;
        var (y, z) = (source[0], back[inner]);
        source[0] = y;
        response[0] = z;
        for (var i = 0; i < inner; i++)
        {
            var d = Pivot(forward[i] + s);
            pivots[i] = d;
            if (i == inner - 1)
                break;
            source[i + 1] += back[i] * (source[i] / d);
            response[i + 1] = back[i] * (response[i] / d);
            s = back[i] * (s / d) - shift;
        }

        response[inner - 1] += forward[inner - 1];
        for (var i = inner - 1; i >= 0; i--)
        {
            source[i] = (source[i] + (i < inner - 1 ? forward[i] * source[i + 1] : 0)) / pivots[i];
            response[i] = (response[i] + (i < inner - 1 ? forward[i] * response[i + 1] : 0)) / pivots[i];
        }

        var (toFirst, toBefore) = (forward[inner], back[inner - 1]);
        var pivot = toFirst * (1 - response[0]) + toBefore * (1 - response[inner - 1]) - shift;
        if (Math.Abs(pivot) < 1e-300)
            pivot = 1e-300;
        var last = (source[inner] + toFirst * source[0] + toBefore * source[inner - 1]) / pivot;
        for (var i = 0; i < inner; i++)
            source[i] += response[i] * last;
        source[inner] = last;
    }

    private void RemoveMean(double[] mode)
    {
        var mean = SpanKernels.Dot(weights, mode);
        for (var i = 0; i < count; i++)
            mode[i] -= mean;
    }

    private void RemoveShare(double[] mode, double[] other)
    {
        var share = 0.0;
        for (var i = 0; i < count; i++)
            share += weights[i] * mode[i] * other[i];
        SpanKernels.AddScaled(mode, -share, other);
    }

    private void Normalise(double[] mode)
    {
        RemoveMean(mode);
        var (square, largest, at) = (0.0, 0.0, 0);
        for (var i = 0; i < count; i++)
        {
            var part = weights[i] * mode[i] * mode[i];
            square += part;
            if (part > largest)
                (largest, at) = (part, i);
        }

        SpanKernels.Scale(mode, Math.Sign(mode[at]) / Math.Sqrt(square));
    }
}
