using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Transport;

/// <summary>
/// Solves −∇·(K∇u) = f on a cell-centred rectangle with variable K ≥ 0 on the faces (no flux through walls, wrap on periodic axes): conjugate
/// gradients preconditioned by one multigrid V-cycle. f must add up to 0; the mean of u is 0.
/// </summary>
/// <remarks>
/// Cells are joined in pairs along the stiffer axis, or in fours; coarse face coefficients are half the sum of those that they replace (Galerkin
/// with constant interpolation, over-corrected by 2: D. Braess, Computing 55 (1995) 379-393); smoothing by Chebyshev polynomials of D⁻¹A (M. Adams, M. Brezina, J. Hu, R. Tuminaro, J. Comput. Phys. 188 (2003) 593-610).
/// All sums run in an order fixed by the grid. Allocates nothing in a call.
/// </remarks>
internal sealed class PlaneElliptic
{
    private const int Lead = 8;
    private const int DirectCells = 64;
    private const int Degree = 3;
    private readonly WorkerTeam team;
    private readonly List<Level> levels = [];
    private readonly double[] dense;
    private readonly double[] denseWork;
    private readonly double[] residual;
    private readonly double[] direction;
    private readonly double[] image;
    private readonly double[] preconditioned;
    private readonly double[] partial;
    private readonly Action<int> productJob;
    private readonly Action<int> updateJob;
    private readonly Action<int> directionJob;
    private readonly Action<int> chebyshevJob;
    private readonly Action<int> residualJob;
    private readonly Action<int> restrictJob;
    private readonly Action<int> prolongJob;
    private readonly Level top;

    // Arguments of the parallel job under way.
    private Level now;
    private double[] source = [];
    private double[] target = [];
    private double[] rightSide = [];
    private double alpha;
    private double beta;
    private bool first;

    public PlaneElliptic(int nx, int ny, bool periodicX, bool periodicY, double widthX, double widthY, WorkerTeam team)
    {
        this.team = team;
        var (weightX, weightY) = (1 / (widthX * widthX), 1 / (widthY * widthY));
        top = new Level(nx, ny, periodicX, periodicY);
        now = top;
        levels.Add(top);
        while (levels[^1].Nx * levels[^1].Ny > DirectCells)
        {
            var fine = levels[^1];
            var joinX = fine.Nx > 1 && (weightX >= 0.4 * weightY || fine.Ny == 1);
            var joinY = fine.Ny > 1 && (weightY >= 0.4 * weightX || fine.Nx == 1);
            if (!joinX && !joinY)
                joinX = joinY = true;
            fine.JoinX = joinX ? 2 : 1;
            fine.JoinY = joinY ? 2 : 1;
            weightX /= fine.JoinX * fine.JoinX;
            weightY /= fine.JoinY * fine.JoinY;
            levels.Add(new Level((fine.Nx + fine.JoinX - 1) / fine.JoinX, (fine.Ny + fine.JoinY - 1) / fine.JoinY, periodicX, periodicY));
        }

        var coarse = levels[^1].Nx * levels[^1].Ny;
        dense = new double[coarse * coarse];
        denseWork = new double[coarse];
        residual = top.NewField();
        direction = top.NewField();
        image = top.NewField();
        preconditioned = top.NewField();
        partial = new double[8 * top.Blocks];
        productJob = Product;
        updateJob = Update;
        directionJob = NewDirection;
        chebyshevJob = ChebyshevStep;
        residualJob = Residual;
        restrictJob = Restrict;
        prolongJob = Prolong;
    }

    /// <summary>Coefficient of the face between cells i and i+1 of a row (over h²), x fastest, length nx·ny; the last of a row is the wrap, ignored at walls.</summary>
    public Span<double> RowX(int row) => top.FaceX.AsSpan(row * top.Stride + Lead, top.Nx);

    /// <summary>Coefficient of the face between rows j and j+1; the last row is the wrap, ignored at walls.</summary>
    public Span<double> RowY(int row) => top.FaceY.AsSpan(row * top.Stride + Lead, top.Nx);

    /// <summary>Half the coefficient of the mixed term at the corner between cells (i, j) and (i+1, j+1), over hx·hy: K₁₂/(2 hx hy).</summary>
    public Span<double> RowCorner(int row) => top.Corner.AsSpan(row * top.Stride + Lead, top.Nx);

    /// <summary>Whether the corner coefficients take part.</summary>
    public bool HasCorners { get; set; }

    /// <summary>Builds the coarse levels after the face coefficients have been written.</summary>
    public void Prepare()
    {
        top.Finish();
        for (var l = 1; l < levels.Count; l++)
        {
            levels[l].Coarsen(levels[l - 1]);
            levels[l].Finish();
        }

        Factorise();
    }

    /// <summary>Solves; returns the iterations. Stops when ‖residual‖₂ ≤ tolerance·‖f‖₂.</summary>
    /// <param name="f">Right side, x fastest; its mean is dropped.</param>
    /// <param name="u">Receives the solution, of mean 0.</param>
    /// <param name="tolerance">Relative residual.</param>
    /// <param name="limit">Most iterations.</param>
    /// <param name="leftover">Receives f − A u.</param>
    public int Solve(ReadOnlySpan<double> f, Span<double> u, double tolerance, int limit, Span<double> leftover = default)
    {
        var cells = top.Nx * top.Ny;
        var mean = SpanKernels.Sum(f) / cells;
        var solution = top.Solution;
        Array.Clear(solution);
        for (var row = 0; row < top.Ny; row++)
        {
            var line = residual.AsSpan(row * top.Stride + Lead, top.Nx);
            f.Slice(row * top.Nx, top.Nx).CopyTo(line);
            for (var i = 0; i < line.Length; i++)
                line[i] -= mean;
            top.Wrap(residual, row);
        }

        var start = Norm(residual);
        var iterations = 0;
        if (start > 0)
        {
            var previous = 0.0;
            for (; iterations < limit; iterations++)
            {
                Cycle(residual, preconditioned);
                var product = Dot(residual, preconditioned);
                if (!(product > 0) || !double.IsFinite(product))
                    break;
                beta = iterations == 0 ? 0 : product / previous;
                previous = product;
                now = top;
                team.Run(top.Blocks, directionJob);
                team.Run(top.Blocks, productJob);
                var curvature = SumPartials();
                if (!(curvature > 0))
                    break;
                alpha = product / curvature;
                team.Run(top.Blocks, updateJob);
                if (Math.Sqrt(SumPartials()) <= tolerance * start)
                {
                    iterations++;
                    break;
                }
            }
        }

        var shift = 0.0;
        for (var row = 0; row < top.Ny; row++)
        {
            var line = solution.AsSpan(row * top.Stride + Lead, top.Nx);
            line.CopyTo(u.Slice(row * top.Nx, top.Nx));
            shift += SpanKernels.Sum(line);
            if (!leftover.IsEmpty)
                residual.AsSpan(row * top.Stride + Lead, top.Nx).CopyTo(leftover.Slice(row * top.Nx, top.Nx));
        }

        shift /= cells;
        foreach (ref var value in u)
            value -= shift;
        return iterations;
    }

    private double Norm(double[] field) => Math.Sqrt(Dot(field, field));

    private double Dot(double[] a, double[] b)
    {
        var sum = 0.0;
        for (var row = 0; row < top.Ny; row++)
            sum += SpanKernels.Dot(a.AsSpan(row * top.Stride + Lead, top.Nx), b.AsSpan(row * top.Stride + Lead, top.Nx));
        return sum;
    }

    private double SumPartials()
    {
        var sum = 0.0;
        for (var i = 0; i < top.Blocks; i++)
            sum += partial[8 * i];
        return sum;
    }

    private void NewDirection(int block)
    {
        var factor = Vector512.Create(beta);
        for (var row = top.FirstRow(block); row < top.FirstRow(block + 1); row++)
        {
            var p = top.Vectors(direction, row);
            var z = top.Vectors(preconditioned, row);
            for (var i = 0; i < p.Length; i++)
                p[i] = z[i] + factor * p[i];
            top.Wrap(direction, row);
        }
    }

    private void Product(int block)
    {
        var sum = 0.0;
        for (var row = top.FirstRow(block); row < top.FirstRow(block + 1); row++)
        {
            top.Multiply(direction, image, row);
            if (HasCorners)
                top.AddCorners(direction, image, row);
            sum += SpanKernels.Dot(direction.AsSpan(row * top.Stride + Lead, top.Nx), image.AsSpan(row * top.Stride + Lead, top.Nx));
        }

        partial[8 * block] = sum;
    }

    private void Update(int block)
    {
        var factor = Vector512.Create(alpha);
        var sum = 0.0;
        for (var row = top.FirstRow(block); row < top.FirstRow(block + 1); row++)
        {
            var u = top.Vectors(top.Solution, row);
            var p = top.Vectors(direction, row);
            var r = top.Vectors(residual, row);
            var q = top.Vectors(image, row);
            for (var i = 0; i < u.Length; i++)
            {
                u[i] += factor * p[i];
                r[i] -= factor * q[i];
            }

            top.Wrap(residual, row);
            var line = residual.AsSpan(row * top.Stride + Lead, top.Nx);
            sum += SpanKernels.Dot(line, line);
        }

        partial[8 * block] = sum;
    }

    // One V-cycle on A z = r, from z = 0.
    private void Cycle(double[] r, double[] z)
    {
        Descend(0, r, z);
    }

    private void Descend(int index, double[] f, double[] u)
    {
        var level = levels[index];
        if (index == levels.Count - 1)
        {
            SolveDirectly(level, f, u);
            return;
        }

        Smooth(level, f, u, fromZero: true);
        var coarse = levels[index + 1];
        now = level;
        (source, rightSide, target) = (u, f, level.Scratch);
        team.Run(level.Blocks, residualJob);
        target = coarse.RightSide;
        team.Run(coarse.Blocks, restrictJob);
        Descend(index + 1, coarse.RightSide, coarse.Correction);
        now = level;
        (source, target) = (coarse.Correction, u);
        team.Run(level.Blocks, prolongJob);
        Smooth(level, f, u, fromZero: false);
    }

    // Chebyshev on the upper part of the spectrum of D⁻¹A, which lies in [0, 2].
    private void Smooth(Level level, double[] f, double[] u, bool fromZero)
    {
        const double upper = 2.0, lower = 0.35;
        const double middle = 0.5 * (upper + lower), half = 0.5 * (upper - lower);
        now = level;
        rightSide = f;
        var (from, to) = (u, level.Scratch);
        if (fromZero)
            Array.Clear(from);
        var rho = 0.0;
        for (var k = 0; k < Degree; k++)
        {
            first = k == 0;
            var next = k == 0 ? half / middle : 1 / (2 * middle / half - rho);
            beta = k == 0 ? 0 : next * rho;
            alpha = k == 0 ? 1 / middle : 2 * next / half;
            rho = next;
            (source, target) = (from, to);
            team.Run(level.Blocks, chebyshevJob);
            (from, to) = (to, from);
        }

        // An odd number of steps ends in the scratch field.
        if (!ReferenceEquals(from, u))
            from.AsSpan().CopyTo(u);
    }

    private void ChebyshevStep(int block)
    {
        var level = now;
        var (a, b) = (Vector512.Create(alpha), Vector512.Create(beta));
        for (var row = level.FirstRow(block); row < level.FirstRow(block + 1); row++)
        {
            level.Multiply(source, target, row);
            var t = level.Vectors(target, row);
            var u = level.Vectors(source, row);
            var f = level.Vectors(rightSide, row);
            var d = level.Vectors(level.Change, row);
            var inverse = level.Vectors(level.InverseDiagonal, row);
            if (first)
            {
                for (var i = 0; i < t.Length; i++)
                {
                    d[i] = a * inverse[i] * (f[i] - t[i]);
                    t[i] = u[i] + d[i];
                }
            }
            else
            {
                for (var i = 0; i < t.Length; i++)
                {
                    d[i] = b * d[i] + a * inverse[i] * (f[i] - t[i]);
                    t[i] = u[i] + d[i];
                }
            }

            level.Wrap(target, row);
        }
    }

    private void Residual(int block)
    {
        var level = now;
        for (var row = level.FirstRow(block); row < level.FirstRow(block + 1); row++)
        {
            level.Multiply(source, target, row);
            var t = level.Vectors(target, row);
            var f = level.Vectors(rightSide, row);
            for (var i = 0; i < t.Length; i++)
                t[i] = f[i] - t[i];
        }
    }

    // From now.Scratch to the right side of the next level: sums of the joined cells.
    private void Restrict(int block)
    {
        var fine = now;
        var coarse = levels[levels.IndexOf(fine) + 1];
        for (var row = coarse.FirstRow(block); row < coarse.FirstRow(block + 1); row++)
        {
            var line = target.AsSpan(row * coarse.Stride + Lead, coarse.Nx);
            line.Clear();
            for (var r = row * fine.JoinY; r < Math.Min(fine.Ny, (row + 1) * fine.JoinY); r++)
            {
                var values = fine.Scratch.AsSpan(r * fine.Stride + Lead, fine.Nx);
                if (fine.JoinX == 1)
                {
                    for (var i = 0; i < line.Length; i++)
                        line[i] += values[i];
                    continue;
                }

                var pairs = values.Length / 2;
                for (var i = 0; i < pairs; i++)
                    line[i] += values[2 * i] + values[2 * i + 1];
                if (pairs < line.Length)
                    line[pairs] += values[^1];
            }

            coarse.Wrap(target, row);
        }
    }

    private void Prolong(int block)
    {
        var fine = now;
        var coarse = levels[levels.IndexOf(fine) + 1];
        for (var row = fine.FirstRow(block); row < fine.FirstRow(block + 1); row++)
        {
            var line = target.AsSpan(row * fine.Stride + Lead, fine.Nx);
            var values = source.AsSpan(row / fine.JoinY * coarse.Stride + Lead, coarse.Nx);
            if (fine.JoinX == 1)
            {
                for (var i = 0; i < line.Length; i++)
                    line[i] += values[i];
            }
            else
            {
                for (var i = 0; i < line.Length; i++)
                    line[i] += values[i >> 1];
            }

            fine.Wrap(target, row);
        }
    }

    private void Factorise()
    {
        var level = levels[^1];
        var n = level.Nx * level.Ny;
        Array.Clear(dense);
        var trace = 0.0;
        for (var row = 0; row < level.Ny; row++)
        {
            for (var i = 0; i < level.Nx; i++)
            {
                var here = row * level.Nx + i;
                Link(here, row * level.Nx + (i + 1) % level.Nx, level.FaceX[row * level.Stride + Lead + i]);
                Link(here, (row + 1) % level.Ny * level.Nx + i, level.FaceY[row * level.Stride + Lead + i]);
            }
        }

        for (var i = 0; i < n; i++)
            trace += dense[i * n + i];
        // The constants are the null space of every connected part; isolated cells (K = 0 all round) get a pivot of their own.
        var rank = trace > 0 ? trace / ((double)n * n) : 1;
        for (var i = 0; i < n; i++)
        {
            for (var j = 0; j < n; j++)
                dense[i * n + j] += rank;
            dense[i * n + i] += 1e-13 * rank * n;
        }

        for (var k = 0; k < n; k++)
        {
            for (var i = k; i < n; i++)
            {
                var sum = dense[i * n + k] - SpanKernels.Dot(dense.AsSpan(i * n, k), dense.AsSpan(k * n, k));
                if (i == k)
                    dense[k * n + k] = Math.Sqrt(Math.Max(sum, 1e-300));
                else
                    dense[i * n + k] = sum / dense[k * n + k];
            }
        }

        void Link(int i, int j, double weight)
        {
            if (i == j)
                return;
            dense[i * n + i] += weight;
            dense[j * n + j] += weight;
            dense[i * n + j] -= weight;
            dense[j * n + i] -= weight;
        }
    }

    private void SolveDirectly(Level level, double[] f, double[] u)
    {
        var n = level.Nx * level.Ny;
        for (var row = 0; row < level.Ny; row++)
            f.AsSpan(row * level.Stride + Lead, level.Nx).CopyTo(denseWork.AsSpan(row * level.Nx));
        var mean = SpanKernels.Sum(denseWork) / n;
        for (var i = 0; i < n; i++)
            denseWork[i] = (denseWork[i] - mean - SpanKernels.Dot(dense.AsSpan(i * n, i), denseWork.AsSpan(0, i))) / dense[i * n + i];
        for (var i = n - 1; i >= 0; i--)
        {
            var sum = denseWork[i];
            for (var k = i + 1; k < n; k++)
                sum -= dense[k * n + i] * denseWork[k];
            denseWork[i] = sum / dense[i * n + i];
        }

        for (var row = 0; row < level.Ny; row++)
        {
            denseWork.AsSpan(row * level.Nx, level.Nx).CopyTo(u.AsSpan(row * level.Stride + Lead));
            level.Wrap(u, row);
        }
    }

    /// <summary>One grid: rows stand Stride apart, with room for a neighbour at either end and whole vectors; what lies past the row stays 0.</summary>
    private sealed class Level
    {
        private readonly bool periodicX;
        private readonly bool periodicY;
        private readonly int rowsPerBlock;

        public Level(int nx, int ny, bool periodicX, bool periodicY)
        {
            Nx = nx;
            Ny = ny;
            this.periodicX = periodicX;
            this.periodicY = periodicY;
            Stride = Lead + (nx + 7) / 8 * 8 + 8;
            rowsPerBlock = Math.Max(8, (8192 + nx - 1) / nx);
            Blocks = (ny + rowsPerBlock - 1) / rowsPerBlock;
            FaceX = NewField();
            FaceY = NewField();
            Corner = NewField();
            InverseDiagonal = NewField();
            Solution = NewField();
            Change = NewField();
            Scratch = NewField();
            RightSide = NewField();
            Correction = NewField();
        }

        public int Nx { get; }

        public int Ny { get; }

        public int Stride { get; }

        public int Blocks { get; }

        public int JoinX { get; set; } = 1;

        public int JoinY { get; set; } = 1;

        public double[] FaceX { get; }

        public double[] FaceY { get; }

        public double[] Corner { get; }

        public double[] InverseDiagonal { get; }

        public double[] Solution { get; }

        public double[] Change { get; }

        public double[] Scratch { get; }

        public double[] RightSide { get; }

        public double[] Correction { get; }

        public double[] NewField() => new double[Stride * Ny];

        public int FirstRow(int block) => Math.Min(Ny, block * rowsPerBlock);

        public Span<Vector512<double>> Vectors(double[] field, int row)
            => MemoryMarshal.Cast<double, Vector512<double>>(field.AsSpan(row * Stride + Lead, (Nx + 7) / 8 * 8));

        /// <summary>Clears what lies past a row and sets the neighbours at its ends.</summary>
        public void Wrap(double[] field, int row)
        {
            var start = row * Stride + Lead;
            for (var i = start + Nx; i < start + (Nx + 7) / 8 * 8; i++)
                field[i] = 0;
            if (periodicX)
            {
                field[start - 1] = field[start + Nx - 1];
                field[start + Nx] = field[start];
            }
        }

        /// <summary>image ← A u on one row. With walls the coefficient of the outer face is 0, so that the value beyond does not matter.</summary>
        public void Multiply(double[] u, double[] image, int row)
        {
            var start = row * Stride + Lead;
            var above = (row + 1 < Ny ? row + 1 : periodicY ? 0 : row) * Stride + Lead;
            var belowRow = row > 0 ? row - 1 : periodicY ? Ny - 1 : -1;
            var below = (belowRow < 0 ? row : belowRow) * Stride + Lead;
            ref var v = ref MemoryMarshal.GetArrayDataReference(u);
            ref var kx = ref MemoryMarshal.GetArrayDataReference(FaceX);
            ref var ky = ref MemoryMarshal.GetArrayDataReference(FaceY);
            ref var w = ref MemoryMarshal.GetArrayDataReference(image);
            for (var i = 0; i < Nx; i += 8)
            {
                var c = Vector512.LoadUnsafe(ref v, (nuint)(start + i));
                var sum = Vector512.LoadUnsafe(ref kx, (nuint)(start + i)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(start + i + 1)));
                sum += Vector512.LoadUnsafe(ref kx, (nuint)(start + i - 1)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(start + i - 1)));
                sum += Vector512.LoadUnsafe(ref ky, (nuint)(start + i)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(above + i)));
                sum += Vector512.LoadUnsafe(ref ky, (nuint)(below + i)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(below + i)));
                sum.StoreUnsafe(ref w, (nuint)(start + i));
            }
        }

        /// <summary>Adds the mixed term: the gradient of Σ over corners of K·∂ₓu·∂ᵧu.</summary>
        public void AddCorners(double[] u, double[] image, int row)
        {
            // A corner (i+½, j+½) sees ∂ₓu = ½(u₁₀ − u₀₀ + u₁₁ − u₀₁), ∂ᵧu = ½(u₀₁ − u₀₀ + u₁₁ − u₁₀); each of its four cells gets its share:
            // 2K ∂ₓ∂ᵧ = ½K[(u₁₁ − u₀₀)² − (u₁₀ − u₀₁)²], so the gradient couples opposite cells only, with weight ½K.
            var start = row * Stride + Lead;
            var hasAbove = row + 1 < Ny || periodicY;
            var hasBelow = row > 0 || periodicY;
            var above = (row + 1 < Ny ? row + 1 : 0) * Stride + Lead;
            var below = (row > 0 ? row - 1 : Ny - 1) * Stride + Lead;
            ref var v = ref MemoryMarshal.GetArrayDataReference(u);
            ref var k = ref MemoryMarshal.GetArrayDataReference(Corner);
            ref var w = ref MemoryMarshal.GetArrayDataReference(image);
            for (var i = 0; i < Nx; i += 8)
            {
                var c = Vector512.LoadUnsafe(ref v, (nuint)(start + i));
                var sum = Vector512.LoadUnsafe(ref w, (nuint)(start + i));
                if (hasAbove)
                {
                    sum += Vector512.LoadUnsafe(ref k, (nuint)(start + i)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(above + i + 1)));
                    sum -= Vector512.LoadUnsafe(ref k, (nuint)(start + i - 1)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(above + i - 1)));
                }

                if (hasBelow)
                {
                    sum += Vector512.LoadUnsafe(ref k, (nuint)(below + i - 1)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(below + i - 1)));
                    sum -= Vector512.LoadUnsafe(ref k, (nuint)(below + i)) * (c - Vector512.LoadUnsafe(ref v, (nuint)(below + i + 1)));
                }

                sum.StoreUnsafe(ref w, (nuint)(start + i));
            }
        }

        /// <summary>Sets outer faces and inverts the diagonal.</summary>
        public void Finish()
        {
            for (var row = 0; row < Ny; row++)
            {
                var start = row * Stride + Lead;
                if (!periodicX || Nx == 1)
                {
                    FaceX[start + Nx - 1] = 0;
                    Corner[start + Nx - 1] = 0;
                }

                if ((!periodicY || Ny == 1) && row == Ny - 1)
                {
                    FaceY.AsSpan(start, Nx).Clear();
                    Corner.AsSpan(start, Nx).Clear();
                }

                for (var i = start + Nx; i < start + (Nx + 7) / 8 * 8; i++)
                    FaceX[i] = FaceY[i] = Corner[i] = 0;
                FaceX[start - 1] = FaceX[start + Nx - 1];
                Corner[start - 1] = Corner[start + Nx - 1];
            }

            for (var row = 0; row < Ny; row++)
            {
                var start = row * Stride + Lead;
                var below = (row > 0 ? row - 1 : Ny - 1) * Stride + Lead;
                for (var i = 0; i < Nx; i++)
                {
                    var sum = FaceX[start + i] + FaceX[start + i - 1] + FaceY[start + i] + FaceY[below + i];
                    InverseDiagonal[start + i] = sum > 0 ? 1 / sum : 0;
                }
            }
        }

        public void Coarsen(Level fine)
        {
            for (var row = 0; row < Ny; row++)
            {
                var start = row * Stride + Lead;
                var lastRow = Math.Min(fine.Ny, (row + 1) * fine.JoinY) - 1;
                for (var i = 0; i < Nx; i++)
                {
                    var lastColumn = Math.Min(fine.Nx, (i + 1) * fine.JoinX) - 1;
                    double alongX = 0, alongY = 0;
                    for (var r = row * fine.JoinY; r <= lastRow; r++)
                        alongX += fine.FaceX[r * fine.Stride + Lead + lastColumn];
                    for (var c = i * fine.JoinX; c <= lastColumn; c++)
                        alongY += fine.FaceY[lastRow * fine.Stride + Lead + c];
                    // Joining along an axis doubles the distance across its faces.
                    FaceX[start + i] = alongX / fine.JoinX;
                    FaceY[start + i] = alongY / fine.JoinY;
                }
            }
        }
    }
}
