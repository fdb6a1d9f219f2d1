using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Schemes.ExactFlow;

/// <summary>
/// e^(tA)ρ in one dimension by the best rational approximation of the exponential: eight complex tridiagonal systems, solved side by side in the
/// lanes of a vector. The cost does not depend on t or on how stiff A is.
/// </summary>
/// <remarks>
/// The systems (θ_k − tA)x = ρ are similar to complex symmetric ones with a positive definite imaginary part (Im θ_k &gt; 1), for which elimination
/// without pivoting is stable. The factors are kept while t stays the same: a step then costs two sweeps. A periodic axis is cut at its last
/// cell, whose value follows from a bordered system.
/// </remarks>
internal sealed class RationalPropagator
{
    private readonly Generator generator;
    private readonly int count;
    private readonly bool periodic;
    // Two vectors (real, imaginary part) of eight poles a cell: reciprocal pivots, the sweep's values, and for a periodic axis the response to its last cell.
    private readonly Vector512<double>[] pivots;
    private readonly Vector512<double>[] sweep;
    private readonly Vector512<double>[] response;
    private Vector512<double> closingReal;
    private Vector512<double> closingImaginary;
    private double factoredTime = double.NaN;

    public RationalPropagator(Generator generator)
    {
        this.generator = generator;
        periodic = generator.Grid.X.IsPeriodic;
        count = generator.Grid.Nx;
        pivots = new Vector512<double>[2 * count];
        sweep = new Vector512<double>[2 * count];
        response = new Vector512<double>[periodic ? 2 * count : 0];
    }

    /// <summary>Whether the factors for this time are at hand.</summary>
    public bool IsFactored(double time) => time == factoredTime;

    /// <summary>density ← e^(time·A) density, to about 1e-14 in the norm weighted by 1/π.</summary>
    public void Advance(Span<double> density, double time)
    {
        if (time != factoredTime)
            Factor(time);
        var inner = periodic ? count - 1 : count;
        var right = generator.RateRight;
        var left = generator.RateLeft;
        ForwardAndBack(density, default, default, inner, time);
        var residueReal = Vector512.Create(RationalExponential.ResidueReal);
        var residueImaginary = Vector512.Create(RationalExponential.ResidueImaginary);
        if (!periodic)
        {
            for (var i = 0; i < count; i++)
                density[i] = Collect(density[i], sweep[2 * i], sweep[2 * i + 1], residueReal, residueImaginary);
            return;
        }

        // The last cell: (d − c·z) x = ρ + c·y with c the rates from its two neighbours.
        var before = Vector512.Create(time * right[inner - 1]);
        var after = Vector512.Create(time * left[0]);
        var re = Vector512.Create(density[inner]) + before * sweep[2 * inner - 2] + after * sweep[0];
        var im = before * sweep[2 * inner - 1] + after * sweep[1];
        var lastReal = re * closingReal - im * closingImaginary;
        var lastImaginary = re * closingImaginary + im * closingReal;
        for (var i = 0; i < inner; i++)
        {
            var (zr, zi) = (response[2 * i], response[2 * i + 1]);
            density[i] = Collect(density[i], sweep[2 * i] + zr * lastReal - zi * lastImaginary, sweep[2 * i + 1] + zr * lastImaginary + zi * lastReal,
                residueReal, residueImaginary);
        }

        density[inner] = Collect(density[inner], lastReal, lastImaginary, residueReal, residueImaginary);
    }

    // r(tA)ρ = r_∞ρ − 2 Re Σ a_k (θ_k − tA)⁻¹ρ. The eight lanes are added in a fixed order.
    private static double Collect(double density, Vector512<double> re, Vector512<double> im, Vector512<double> residueReal, Vector512<double> residueImaginary)
    {
        var terms = residueReal * re - residueImaginary * im;
        var four = terms.GetLower() + terms.GetUpper();
        var two = four.GetLower() + four.GetUpper();
        return RationalExponential.AtInfinity * density - 2 * (two[0] + two[1]);
    }

    private void Factor(double time)
    {
        var right = generator.RateRight;
        var left = generator.RateLeft;
        var exit = generator.ExitRate;
        var poleReal = Vector512.Create(RationalExponential.PoleReal);
        var poleImaginary = Vector512.Create(RationalExponential.PoleImaginary);
        var (pivotReal, pivotImaginary) = (Vector512<double>.Zero, Vector512<double>.Zero);
        for (var i = 0; i < count; i++)
        {
            var coupling = i == 0 ? 0 : time * right[i - 1] * (time * left[i]);
            var re = poleReal + Vector512.Create(time * exit[i]) - Vector512.Create(coupling) * pivotReal;
            var im = poleImaginary - Vector512.Create(coupling) * pivotImaginary;
            (pivotReal, pivotImaginary) = Reciprocal(re, im);
            pivots[2 * i] = pivotReal;
            pivots[2 * i + 1] = pivotImaginary;
        }

        if (periodic)
            FactorClosing(time, poleReal, poleImaginary);
        factoredTime = time;
    }

    private void FactorClosing(double time, Vector512<double> poleReal, Vector512<double> poleImaginary)
    {
        var right = generator.RateRight;
        var left = generator.RateLeft;
        var exit = generator.ExitRate;
        var inner = count - 1;
        ForwardAndBack(default, Vector512.Create(time * right[inner]), Vector512.Create(time * left[inner]), inner, time);
        Array.Copy(sweep, response, 2 * inner);
        var before = Vector512.Create(time * right[inner - 1]);
        var after = Vector512.Create(time * left[0]);
        var re = poleReal + Vector512.Create(time * exit[inner]) - before * response[2 * inner - 2] - after * response[0];
        var im = poleImaginary - before * response[2 * inner - 1] - after * response[1];
        (closingReal, closingImaginary) = Reciprocal(re, im);
    }

    // Solves for the first so many cells. The right-hand side is the density; or, when that is empty, what the last cell of a periodic axis
    // sends into its two neighbours.
    private void ForwardAndBack(ReadOnlySpan<double> density, Vector512<double> intoFirst, Vector512<double> intoLast, int inner, double time)
    {
        var right = generator.RateRight;
        var left = generator.RateLeft;
        var (vr, vi) = (Vector512<double>.Zero, Vector512<double>.Zero);
        for (var i = 0; i < inner; i++)
        {
            var source = density.Length > 0 ? Vector512.Create(density[i])
                : (i == 0 ? intoFirst : default) + (i == inner - 1 ? intoLast : default);
            var rate = Vector512.Create(i == 0 ? 0 : time * right[i - 1]);
            var re = Vector512.MultiplyAddEstimate(rate, vr, source);
            var im = rate * vi;
            var (gr, gi) = (pivots[2 * i], pivots[2 * i + 1]);
            vr = Vector512.MultiplyAddEstimate(gr, re, -(gi * im));
            vi = Vector512.MultiplyAddEstimate(gr, im, gi * re);
            sweep[2 * i] = vr;
            sweep[2 * i + 1] = vi;
        }

        for (var i = inner - 2; i >= 0; i--)
        {
            var rate = Vector512.Create(time * left[i + 1]);
            var (gr, gi) = (rate * pivots[2 * i], rate * pivots[2 * i + 1]);
            var re = Vector512.MultiplyAddEstimate(gr, vr, Vector512.MultiplyAddEstimate(-gi, vi, sweep[2 * i]));
            var im = Vector512.MultiplyAddEstimate(gr, vi, Vector512.MultiplyAddEstimate(gi, vr, sweep[2 * i + 1]));
            (vr, vi) = (re, im);
            sweep[2 * i] = vr;
            sweep[2 * i + 1] = vi;
        }
    }

    private static (Vector512<double> Real, Vector512<double> Imaginary) Reciprocal(Vector512<double> re, Vector512<double> im)
    {
        var inverse = Vector512<double>.One / (re * re + im * im);
        return (re * inverse, -im * inverse);
    }
}
