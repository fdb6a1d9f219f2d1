namespace FlowSolver.Foundation;

/// <summary>All eigenvalues and eigenvectors of a small symmetric matrix by Jacobi's rotations, which keep small eigenvalues beside large ones accurate.</summary>
/// <remarks>C. G. J. Jacobi, J. reine angew. Math. 30 (1846) 51-94; accuracy on graded matrices: J. Demmel, K. Veselić, SIAM J. Matrix Anal. Appl. 13 (1992) 1204-1245 (from memory).</remarks>
public static class SymmetricEigen
{
    /// <summary>Decomposes a symmetric matrix in place.</summary>
    /// <param name="matrix">n × n, row by row; destroyed.</param>
    /// <param name="values">Receives the eigenvalues in increasing order; length n.</param>
    /// <param name="vectors">Receives the eigenvectors: entry i of vector k at index k·n + i; length n².</param>
    /// <exception cref="ArgumentException">The lengths do not agree.</exception>
    public static void Decompose(Span<double> matrix, Span<double> values, Span<double> vectors)
    {
        var n = values.Length;
        Require.Length(matrix.Length, n * n);
        Require.Length(vectors.Length, n * n);
        vectors.Clear();
        for (var i = 0; i < n; i++)
            vectors[i * n + i] = 1;
        for (var sweep = 0; sweep < 40; sweep++)
        {
            var turned = false;
            for (var p = 0; p < n - 1; p++)
            {
                for (var q = p + 1; q < n; q++)
                {
                    var off = matrix[p * n + q];
                    var (a, b) = (matrix[p * n + p], matrix[q * n + q]);
                    if (Math.Abs(off) <= 1e-17 * Math.Sqrt(Math.Abs(a)) * Math.Sqrt(Math.Abs(b)) || off == 0)
                        continue;
                    turned = true;
                    var theta = (b - a) / (2 * off);
                    var tangent = Math.Abs(theta) > 1e150 ? 0.5 / theta : Math.CopySign(1, theta) / (Math.Abs(theta) + Math.Sqrt(theta * theta + 1));
                    var cosine = 1 / Math.Sqrt(tangent * tangent + 1);
                    Rotate(matrix, vectors, n, p, q, tangent, cosine, off);
                }
            }

            if (!turned)
                break;
        }

        for (var i = 0; i < n; i++)
            values[i] = matrix[i * n + i];
        Sort(values, vectors, n);
    }

    private static void Rotate(Span<double> matrix, Span<double> vectors, int n, int p, int q, double tangent, double cosine, double off)
    {
        var sine = tangent * cosine;
        matrix[p * n + p] -= tangent * off;
        matrix[q * n + q] += tangent * off;
        matrix[p * n + q] = matrix[q * n + p] = 0;
        for (var k = 0; k < n; k++)
        {
            if (k != p && k != q)
            {
                var (x, y) = (matrix[k * n + p], matrix[k * n + q]);
                matrix[k * n + p] = matrix[p * n + k] = cosine * x - sine * y;
                matrix[k * n + q] = matrix[q * n + k] = sine * x + cosine * y;
            }

            var (v, w) = (vectors[p * n + k], vectors[q * n + k]);
            vectors[p * n + k] = cosine * v - sine * w;
            vectors[q * n + k] = sine * v + cosine * w;
        }
    }

    private static void Sort(Span<double> values, Span<double> vectors, int n)
    {
        for (var i = 0; i < n - 1; i++)
        {
            var least = i;
            for (var j = i + 1; j < n; j++)
            {
                if (values[j] < values[least])
                    least = j;
            }

            if (least == i)
                continue;
            (values[i], values[least]) = (values[least], values[i]);
            for (var k = 0; k < n; k++)
                (vectors[i * n + k], vectors[least * n + k]) = (vectors[least * n + k], vectors[i * n + k]);
        }
    }
}
