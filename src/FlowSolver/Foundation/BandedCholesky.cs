using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// A symmetric positive definite matrix of bounded bandwidth and its Cholesky factors, for systems of some thousand unknowns.
/// </summary>
/// <remarks>Lower triangle by rows: entry (i, j), i − bandwidth ≤ j ≤ i, stands at i·(bandwidth + 1) + j − i + bandwidth. G. Golub, C. Van Loan, Matrix Computations.</remarks>
public sealed class BandedCholesky
{
    private readonly double[] entries;
    private readonly int width;

    /// <summary>Takes memory; all entries are 0.</summary>
    /// <param name="order">Number of unknowns.</param>
    /// <param name="bandwidth">Largest distance of an entry from the diagonal.</param>
    public BandedCholesky(int order, int bandwidth)
    {
        Order = Require.AtLeast(order, 1);
        Bandwidth = Require.AtLeast(bandwidth, 0);
        width = bandwidth + 1;
        entries = new double[checked(order * width)];
    }

    /// <summary>Number of unknowns.</summary>
    public int Order { get; }

    /// <summary>Largest distance of an entry from the diagonal.</summary>
    public int Bandwidth { get; }

    /// <summary>Sets all entries to 0.</summary>
    public void Clear() => Array.Clear(entries);

    /// <summary>Adds to the entry (row, column) and its mirror image.</summary>
    /// <exception cref="ArgumentException">The entry lies outside the band.</exception>
    public void Add(int row, int column, double value)
    {
        if (column > row)
            (row, column) = (column, row);
        Require.That(row - column <= Bandwidth, $"The entry ({row}, {column}) lay outside the band of {Bandwidth}; it must lie inside.");
        entries[row * width + column - row + Bandwidth] += value;
    }

    /// <summary>Adds a share of each diagonal entry to itself.</summary>
    public void LiftDiagonal(double share)
    {
        for (var i = 0; i < Order; i++)
            entries[i * width + Bandwidth] *= 1 + share;
    }

    /// <summary>Replaces the matrix by its factor.</summary>
    /// <returns>Whether the matrix was positive definite; when not, the entries are spoilt.</returns>
    public bool Factor()
    {
        for (var i = 0; i < Order; i++)
        {
            var rowStart = i * width + Bandwidth - i;
            var first = Math.Max(0, i - Bandwidth);
            for (var j = first; j <= i; j++)
            {
                var otherStart = j * width + Bandwidth - j;
                var from = Math.Max(first, j - Bandwidth);
                var sum = entries[rowStart + j] - Dot(rowStart + from, otherStart + from, j - from);
                if (j < i)
                {
                    entries[rowStart + j] = sum / entries[otherStart + j];
                    continue;
                }

                if (!(sum > 0))
                    return false;
                entries[rowStart + j] = Math.Sqrt(sum);
            }
        }

        return true;
    }

    /// <summary>Solves for one right-hand side in place, after <see cref="Factor"/>.</summary>
    public void Solve(Span<double> rightSide)
    {
        Require.Length(rightSide.Length, Order);
        for (var i = 0; i < Order; i++)
        {
            var first = Math.Max(0, i - Bandwidth);
            var start = i * width + Bandwidth - i;
            var sum = rightSide[i];
            for (var j = first; j < i; j++)
                sum -= entries[start + j] * rightSide[j];
            rightSide[i] = sum / entries[start + i];
        }

        for (var i = Order - 1; i >= 0; i--)
        {
            var first = Math.Max(0, i - Bandwidth);
            var start = i * width + Bandwidth - i;
            var value = rightSide[i] / entries[start + i];
            rightSide[i] = value;
            for (var j = first; j < i; j++)
                rightSide[j] -= entries[start + j] * value;
        }
    }

    private double Dot(int a, int b, int length)
    {
        ref var origin = ref LineInterleave.First(entries);
        var sum = Vector512<double>.Zero;
        var more = Vector512<double>.Zero;
        var k = 0;
        for (; k + 16 <= length; k += 16)
        {
            sum += Vector512.LoadUnsafe(ref origin, (nuint)(a + k)) * Vector512.LoadUnsafe(ref origin, (nuint)(b + k));
            more += Vector512.LoadUnsafe(ref origin, (nuint)(a + k + 8)) * Vector512.LoadUnsafe(ref origin, (nuint)(b + k + 8));
        }

        var tail = 0.0;
        for (; k < length; k++)
            tail += entries[a + k] * entries[b + k];
        return Vector512.Sum(sum + more) + tail;
    }
}
