using System.Runtime.Intrinsics;

namespace FlowSolver.Foundation;

/// <summary>
/// Restarted GMRES with a right preconditioner and a weighted inner product ⟨a, b⟩ = Σ wᵢ aᵢ bᵢ, matrix-free, for long vectors on several threads.
/// </summary>
/// <remarks>
/// Y. Saad, M. Schultz, SIAM J. Sci. Stat. Comput. 7 (1986) 856-869; right preconditioning keeps the true residual, so the tolerance is a promise
/// about ‖b − Ax‖ in the weighted norm relative to ‖b‖. Classical Gram-Schmidt in one pass over the basis: for the few dozen vectors and the
/// tolerances used here its loss of orthogonality does not show. Elements of weight 0 (margins) take no part in any sum.
/// Sums are cut into fixed blocks: results do not depend on the number of threads. A solve allocates nothing.
/// </remarks>
public sealed class Gmres
{
    private const int BlockLength = 8192;
    private readonly WorkerTeam team;
    private readonly int length;
    private readonly int restart;
    private readonly int blocks;
    private readonly double[][] basis;
    private readonly double[] preconditioned;
    private readonly double[] hessenberg;
    private readonly double[] cosines;
    private readonly double[] sines;
    private readonly double[] residuals;
    private readonly double[] coefficients;
    private readonly double[] partial;
    private readonly Action<int> dots;
    private readonly Action<int> subtract;
    private readonly Action<int> scale;
    private readonly Action<int> combine;
    private readonly Action<int> residual;
    private readonly Action<int> add;
    private double[] weights = [];
    private double[] solution = [];
    private double[] rightSide = [];
    private int column;
    private double factor;

    /// <summary>Takes memory for <paramref name="restart"/> + 2 vectors.</summary>
    /// <param name="length">Length of the vectors.</param>
    /// <param name="restart">Products before a restart, at least 2.</param>
    /// <param name="team">Threads.</param>
    public Gmres(int length, int restart, WorkerTeam team)
    {
        ArgumentNullException.ThrowIfNull(team);
        this.team = team;
        this.length = Require.AtLeast(length, 1);
        this.restart = Require.AtLeast(restart, 2);
        blocks = (length + BlockLength - 1) / BlockLength;
        basis = new double[restart + 1][];
        for (var i = 0; i < basis.Length; i++)
            basis[i] = new double[length];
        preconditioned = new double[length];
        hessenberg = new double[(restart + 1) * restart];
        cosines = new double[restart];
        sines = new double[restart];
        residuals = new double[restart + 1];
        coefficients = new double[restart + 1];
        partial = new double[blocks * (restart + 2)];
        dots = DotsBlock;
        subtract = SubtractBlock;
        scale = ScaleBlock;
        combine = CombineBlock;
        residual = ResidualBlock;
        add = AddBlock;
    }

    /// <summary>Solves A x = b from x = 0.</summary>
    /// <param name="rightSide">b.</param>
    /// <param name="solution">Receives x.</param>
    /// <param name="weights">w, not negative.</param>
    /// <param name="apply">Writes A times its first argument to its second; may fill ghost cells of the first.</param>
    /// <param name="precondition">Writes an approximation of A⁻¹ times its first argument to its second.</param>
    /// <param name="tolerance">Stops when ‖b − Ax‖ ≤ tolerance · ‖b‖.</param>
    /// <param name="mostProducts">Stops after this many products at the latest.</param>
    /// <returns>Products with A and the residual reached, relative to ‖b‖.</returns>
    public (int Products, double Residual) Solve(
        double[] rightSide, double[] solution, double[] weights, Action<double[], double[]> apply, Action<double[], double[]> precondition,
        double tolerance, int mostProducts)
    {
        ArgumentNullException.ThrowIfNull(rightSide);
        ArgumentNullException.ThrowIfNull(solution);
        ArgumentNullException.ThrowIfNull(weights);
        ArgumentNullException.ThrowIfNull(apply);
        ArgumentNullException.ThrowIfNull(precondition);
        Require.Length(rightSide.Length, length);
        Require.Length(solution.Length, length);
        Require.Length(weights.Length, length);
        this.weights = weights;
        this.solution = solution;
        this.rightSide = rightSide;
        Array.Clear(solution);
        Array.Copy(rightSide, basis[0], length);
        var first = Norm(0);
        if (!(first > 0) || !double.IsFinite(first))
            return (0, first > 0 ? double.NaN : 0);
        var norm = first;
        var products = 0;
        while (true)
        {
            factor = 1 / norm;
            column = 0;
            team.Run(blocks, scale);
            Array.Clear(residuals);
            residuals[0] = norm;
            var used = 0;
            while (used < restart && products < mostProducts && Math.Abs(residuals[used]) > tolerance * first)
            {
                precondition(basis[used], preconditioned);
                apply(preconditioned, basis[used + 1]);
                products++;
                Orthogonalise(used);
                used++;
            }

            for (var i = used - 1; i >= 0; i--)
            {
                var sum = residuals[i];
                for (var k = i + 1; k < used; k++)
                    sum -= hessenberg[i * restart + k] * coefficients[k];
                coefficients[i] = sum / hessenberg[i * restart + i];
            }

            var reached = Math.Abs(residuals[used]);
            column = used;
            if (used > 0)
            {
                // Σ yᵢ vᵢ goes into the spare last vector; preconditioned once, it is the correction.
                team.Run(blocks, combine);
                precondition(basis[used], preconditioned);
                team.Run(blocks, add);
            }

            if (reached <= tolerance * first || products >= mostProducts || used == 0)
                return (products, reached / first);
            Array.Copy(solution, preconditioned, length);
            apply(preconditioned, basis[0]);
            team.Run(blocks, residual);
            norm = Norm(0);
            if (!(norm > 0) || !double.IsFinite(norm))
                return (products, norm > 0 ? double.NaN : 0);
        }
    }

    private void Orthogonalise(int k)
    {
        column = k + 1;
        team.Run(blocks, dots);
        for (var i = 0; i <= k; i++)
        {
            var sum = 0.0;
            for (var b = 0; b < blocks; b++)
                sum += partial[b * (restart + 2) + i];
            coefficients[i] = sum;
        }

        team.Run(blocks, subtract);
        var square = 0.0;
        for (var b = 0; b < blocks; b++)
            square += partial[b * (restart + 2)];
        var norm = Math.Sqrt(square);
        for (var i = 0; i < k; i++)
        {
            var (upper, lower) = (coefficients[i], coefficients[i + 1]);
            coefficients[i] = cosines[i] * upper + sines[i] * lower;
            coefficients[i + 1] = cosines[i] * lower - sines[i] * upper;
        }

        var length2 = Math.Sqrt(coefficients[k] * coefficients[k] + norm * norm);
        cosines[k] = length2 > 0 ? coefficients[k] / length2 : 1;
        sines[k] = length2 > 0 ? norm / length2 : 0;
        for (var i = 0; i < k; i++)
            hessenberg[i * restart + k] = coefficients[i];
        hessenberg[k * restart + k] = length2;
        residuals[k + 1] = -sines[k] * residuals[k];
        residuals[k] *= cosines[k];
        factor = norm > 0 ? 1 / norm : 0;
        team.Run(blocks, scale);
    }

    private double Norm(int vector)
    {
        column = vector;
        coefficients[0] = 0;
        team.Run(blocks, subtract);
        var square = 0.0;
        for (var b = 0; b < blocks; b++)
            square += partial[b * (restart + 2)];
        return Math.Sqrt(square);
    }

    private (int From, int To) Bounds(int block) => (block * BlockLength, Math.Min(length, (block + 1) * BlockLength));

    // ⟨v_column, v_i⟩ for all i below column.
    private void DotsBlock(int block)
    {
        var (from, to) = Bounds(block);
        ref var w = ref LineInterleave.First(weights);
        ref var a = ref LineInterleave.First(basis[column]);
        for (var v = 0; v < column; v++)
        {
            ref var b = ref LineInterleave.First(basis[v]);
            var sum = Vector512<double>.Zero;
            var more = Vector512<double>.Zero;
            var i = from;
            for (; i + 16 <= to; i += 16)
            {
                sum += Vector512.LoadUnsafe(ref w, (nuint)i) * Vector512.LoadUnsafe(ref a, (nuint)i) * Vector512.LoadUnsafe(ref b, (nuint)i);
                more += Vector512.LoadUnsafe(ref w, (nuint)i + 8) * Vector512.LoadUnsafe(ref a, (nuint)i + 8) * Vector512.LoadUnsafe(ref b, (nuint)i + 8);
            }

            var tail = 0.0;
            for (; i < to; i++)
                tail += weights[i] * basis[column][i] * basis[v][i];
            partial[block * (restart + 2) + v] = Vector512.Sum(sum + more) + tail;
        }
    }

    // v_column −= Σ coefficients_i v_i for i below column; leaves the square of its norm.
    private void SubtractBlock(int block)
    {
        var (from, to) = Bounds(block);
        ref var w = ref LineInterleave.First(weights);
        ref var a = ref LineInterleave.First(basis[column]);
        for (var v = 0; v < column; v++)
        {
            ref var b = ref LineInterleave.First(basis[v]);
            var c = Vector512.Create(coefficients[v]);
            var i = from;
            for (; i + 8 <= to; i += 8)
                (Vector512.LoadUnsafe(ref a, (nuint)i) - c * Vector512.LoadUnsafe(ref b, (nuint)i)).StoreUnsafe(ref a, (nuint)i);
            for (; i < to; i++)
                basis[column][i] -= coefficients[v] * basis[v][i];
        }

        var sum = Vector512<double>.Zero;
        var k = from;
        for (; k + 8 <= to; k += 8)
        {
            var value = Vector512.LoadUnsafe(ref a, (nuint)k);
            sum += Vector512.LoadUnsafe(ref w, (nuint)k) * value * value;
        }

        var tail = 0.0;
        for (; k < to; k++)
            tail += weights[k] * basis[column][k] * basis[column][k];
        partial[block * (restart + 2)] = Vector512.Sum(sum) + tail;
    }

    private void ScaleBlock(int block)
    {
        var (from, to) = Bounds(block);
        SpanKernels.Scale(basis[column].AsSpan(from, to - from), factor);
    }

    private void CombineBlock(int block)
    {
        var (from, to) = Bounds(block);
        var target = basis[column].AsSpan(from, to - from);
        target.Clear();
        for (var v = 0; v < column; v++)
            SpanKernels.AddScaled(target, coefficients[v], basis[v].AsSpan(from, to - from));
    }

    private void AddBlock(int block)
    {
        var (from, to) = Bounds(block);
        SpanKernels.AddScaled(solution.AsSpan(from, to - from), 1, preconditioned.AsSpan(from, to - from));
    }

    private void ResidualBlock(int block)
    {
        var (from, to) = Bounds(block);
        for (var i = from; i < to; i++)
            basis[0][i] = rightSide[i] - basis[0][i];
    }
}
