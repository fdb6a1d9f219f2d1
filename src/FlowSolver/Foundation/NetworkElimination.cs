namespace FlowSolver.Foundation;

/// <summary>
/// Direct solution on a network of conductances, Σ_j c_ij (u_i − u_j) + g_i u_i = f_i, by taking out one node after the other and joining its
/// neighbours (star to mesh). Nothing is ever subtracted, so that conductances over hundreds of orders of magnitude keep their digits.
/// </summary>
/// <remarks>Elimination without subtraction: W. Grassmann, M. Taksar, D. Heyman, Oper. Res. 33 (1985) 1107-1116 (from memory). Links reach at most <c>bandwidth</c> nodes ahead.</remarks>
internal sealed class NetworkElimination
{
    private readonly int count;
    private readonly int bandwidth;
    private readonly double[] links;
    private readonly double[] ground;
    private readonly double[] pivots;

    public NetworkElimination(int count, int bandwidth)
    {
        this.count = count;
        this.bandwidth = bandwidth;
        links = new double[checked(count * bandwidth)];
        ground = new double[count];
        pivots = new double[count];
    }

    /// <summary>Adds a conductance between two nodes.</summary>
    public void Link(int a, int b, double conductance)
    {
        var (low, high) = a < b ? (a, b) : (b, a);
        links[low * bandwidth + high - low - 1] += conductance;
    }

    /// <summary>Adds a conductance to ground.</summary>
    public void Ground(int node, double conductance) => ground[node] += conductance;

    /// <summary>Takes out the nodes; call once after all links are there.</summary>
    public void Factor()
    {
        for (var i = 0; i < count; i++)
        {
            var own = links.AsSpan(i * bandwidth, Math.Min(bandwidth, count - 1 - i));
            var pivot = ground[i];
            foreach (var link in own)
                pivot += link;
            // Below this there is no conductance left to speak of, and shares of it would be noise.
            pivots[i] = pivot > 1e-295 ? pivot : 0;
            if (pivots[i] == 0)
                continue;
            for (var a = 0; a < own.Length; a++)
            {
                if (own[a] == 0)
                    continue;
                var share = own[a] / pivot;
                ground[i + 1 + a] += share * ground[i];
                var row = links.AsSpan((i + 1 + a) * bandwidth, own.Length - 1 - a);
                SpanKernels.AddScaled(row, share, own[(a + 1)..]);
            }
        }
    }

    /// <summary>Solves in place. A node without links and ground, or the last one where nothing is grounded, is held at 0.</summary>
    public void Solve(Span<double> values)
    {
        for (var i = 0; i < count; i++)
        {
            if (pivots[i] == 0)
                continue;
            var own = links.AsSpan(i * bandwidth, Math.Min(bandwidth, count - 1 - i));
            SpanKernels.AddScaled(values.Slice(i + 1, own.Length), values[i] / pivots[i], own);
        }

        for (var i = count - 1; i >= 0; i--)
        {
            var length = Math.Min(bandwidth, count - 1 - i);
            values[i] = pivots[i] == 0 ? 0
                : (values[i] + SpanKernels.Dot(links.AsSpan(i * bandwidth, length), values.Slice(i + 1, length))) / pivots[i];
        }
    }
}
