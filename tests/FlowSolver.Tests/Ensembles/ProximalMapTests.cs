using FlowSolver.Ensembles;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// Mutations tried: the bracket's upper bound left as it was when the force is positive; Apply_SteepQuartic_ReachesTheTolerance failed (Newton cycled and
/// bisection had nothing to halve). The interval test at a stop reduced to its lower side; Apply_Kinks_LandExactlyOnThem failed.
/// In the plane: the held coordinates not masked in the Hessian; Apply_PlaneAtAWall_MinimisesOverTheBox failed.
/// </summary>
public class ProximalMapTests
{
    private static readonly Interval Wide = new(-4, 4);

    // Kinked: |x − 0.5| + 0.3 x² + max(0, −x): kinks at 0.5 and 0, both valleys of slope.
    private sealed class KinkedPotential : Potential
    {
        public override int Dimension => 1;

        public override string Description => "kinked";

        public override bool IsSmooth => false;

        public override IReadOnlyList<Kink> FindKinks(Interval interval) => [new(0, -2, -1, 0), new(0.5, -0.7, 1.3, 0)];

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = Math.Abs(x[i] - 0.5) + 0.3 * x[i] * x[i] + Math.Max(0, -x[i]);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
                gradientX[i] = (x[i] > 0.5 ? 1 : -1) + 0.6 * x[i] - (x[i] < 0 ? 1 : 0);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, []);
            target.HessianXX[..x.Length].Fill(0.6);
        }
    }

    private static double[] Sweep(double from, double to, int count)
    {
        var x = new double[count];
        for (var i = 0; i < count; i++)
            x[i] = from + (to - from) * i / (count - 1);
        return x;
    }

    private static double Brute(Potential potential, double t, double x, Interval interval)
    {
        double Objective(double y) => (y - x) * (y - x) / (2 * t) + potential.ValueAt(y);
        var (low, high) = (interval.From, interval.To);
        // Coarse search, then golden sections (the objective is convex in these tests).
        while (high - low > 1e-9)
        {
            var a = low + 0.381966 * (high - low);
            var b = high - 0.381966 * (high - low);
            if (Objective(a) < Objective(b))
                high = b;
            else
                low = a;
        }

        return 0.5 * (low + high);
    }

    [Theory]
    [InlineData(0.02)]
    [InlineData(0.3)]
    [InlineData(0.9)]
    public void Apply_DoubleWell_EqualsBruteForce(double t)
    {
        // V″ ≥ −1 and t < 1: unique.
        var potential = new PolynomialPotential(0, 0.1, -0.5, 0, 0.25);
        var map = new ProximalMap(potential, new Domain(Wide));
        Assert.True(map.IsUnique(t));
        var x = Sweep(-4, 4, 101);
        var y = new double[x.Length];
        Assert.Equal(0, map.Apply(t, x, [], y, []));
        for (var i = 0; i < x.Length; i++)
        {
            Assert.InRange(y[i] - Brute(potential, t, x[i], Wide), -1e-6, 1e-6);
            Assert.InRange(y[i] - x[i] + t * (0.1 - y[i] + y[i] * y[i] * y[i]), -8e-12, 8e-12);
        }
    }

    [Theory]
    [InlineData(1.0)]
    [InlineData(1e3)]
    [InlineData(1e6)]
    public void Apply_SteepQuartic_ReachesTheTolerance(double t)
    {
        var map = new ProximalMap(new PolynomialPotential(0, 0, 0, 0, 50), new Domain(new Interval(-10, 10)));
        var x = Sweep(-10, 10, 1003);
        var y = new double[x.Length];
        Assert.Equal(0, map.Apply(t, x, [], y, []));
        for (var i = 0; i < x.Length; i++)
            Assert.InRange(y[i] - x[i] + t * 200 * y[i] * y[i] * y[i], -2e-11, 2e-11);
    }

    [Fact]
    public void Apply_Kinks_LandExactlyOnThem()
    {
        var potential = new KinkedPotential();
        var map = new ProximalMap(potential, new Domain(Wide));
        var x = Sweep(-4, 4, 2001);
        var y = new double[x.Length];
        const double t = 0.4;
        Assert.Equal(0, map.Apply(t, x, [], y, []));
        int atZero = 0, atHalf = 0;
        for (var i = 0; i < x.Length; i++)
        {
            Assert.InRange(y[i] - Brute(potential, t, x[i], Wide), -1e-6, 1e-6);
            atZero += y[i] == 0 ? 1 : 0;
            atHalf += y[i] == 0.5 ? 1 : 0;
            // x lands on a kink when it lies between kink + t·slope before and kink + t·slope after; the ends of the sweep's cells aside.
            if (x[i] is > -0.8 + 1e-9 and < -0.4 - 1e-9)
                Assert.Equal(0.0, y[i]);
            if (x[i] is > 0.22 + 1e-9 and < 1.02 - 1e-9)
                Assert.Equal(0.5, y[i]);
        }

        Assert.InRange(atZero, 99, 101);
        Assert.InRange(atHalf, 199, 201);
    }

    [Fact]
    public void Apply_WallThatIsPushedInto_Stops()
    {
        var map = new ProximalMap(new PolynomialPotential(0, -2, 0, 0.1), new Domain(new Interval(-1, 1)));
        double[] x = [-1, 0, 0.5, 0.9];
        var y = new double[4];
        Assert.Equal(0, map.Apply(0.1, x, [], y, []));
        Assert.Equal(1.0, y[3]);
        Assert.InRange(y[1], 0.19, 0.2);
    }

    [Fact]
    public void Apply_OnACircle_Wraps()
    {
        var potential = new CosinePotential();
        var map = new ProximalMap(potential, new Domain(new Interval(0, 2 * Math.PI, AxisEnds.Periodic)));
        var x = Sweep(0, 2 * Math.PI, 333);
        var y = new double[x.Length];
        const double t = 0.6;
        Assert.Equal(0, map.Apply(t, x, [], y, []));
        for (var i = 0; i < x.Length; i++)
        {
            Assert.InRange(y[i], 0, 2 * Math.PI);
            var residual = y[i] - x[i] - t * Math.Sin(y[i]);
            residual -= 2 * Math.PI * Math.Round(residual / (2 * Math.PI));
            Assert.InRange(residual, -2e-11, 2e-11);
        }
    }

    private sealed class CosinePotential : Potential
    {
        public override int Dimension => 1;

        public override string Description => "cos x";

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = Math.Cos(x[i]);
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
        {
            for (var i = 0; i < x.Length; i++)
                gradientX[i] = -Math.Sin(x[i]);
        }

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            Gradient(x, y, target.GradientX, []);
            for (var i = 0; i < x.Length; i++)
                target.HessianXX[i] = -Math.Cos(x[i]);
        }
    }

    [Fact]
    public void Apply_Quadratic_EqualsTheClosedForm()
    {
        var map = new ProximalMap(new PolynomialPotential(0, 0.3, 1.5), new Domain(Wide));
        var y = new double[11];
        map.Apply(0.7, Sweep(-4, 4, 11), [], y, []);
        for (var i = 0; i < y.Length; i++)
            Assert.Equal((-4 + 0.8 * i - 0.21) / 3.1, y[i], 14);
    }

    [Fact]
    public void Apply_SlowAndClosedForm_Agree()
    {
        // The same parabola with a quartic coefficient of 0 goes through Newton.
        var x = Sweep(-4, 4, 77);
        double[] closed = new double[77], newton = new double[77];
        new ProximalMap(new PolynomialPotential(0, 0.3, 1.5), new Domain(Wide)).Apply(0.7, x, [], closed, []);
        new ProximalMap(new PolynomialPotential(0, 0.3, 1.5, 0, 0), new Domain(Wide)).Apply(0.7, x, [], newton, []);
        for (var i = 0; i < x.Length; i++)
            Assert.Equal(closed[i], newton[i], 11);
    }

    [Theory]
    [InlineData(0.05)]
    [InlineData(0.9)]
    public void Apply_Plane_ReachesTheTolerance(double t)
    {
        // Least curvature about −0.56: unique for t < 1.7.
        var map = new ProximalMap(new PlanePotential(-0.5, 0.3, 1, 0.5), new Domain(Wide, Wide));
        Assert.True(map.IsUnique(t));
        var (x, y) = Lattice(41);
        double[] u = new double[x.Length], v = new double[x.Length];
        Assert.Equal(0, map.Apply(t, x, y, u, v));
        for (var i = 0; i < x.Length; i++)
        {
            Assert.InRange(u[i] - x[i] + t * (-0.5 * u[i] + 0.3 * v[i] + 0.5 * u[i] * u[i] * u[i]), -8e-12, 8e-12);
            Assert.InRange(v[i] - y[i] + t * (0.3 * u[i] + v[i] + 0.5 * v[i] * v[i] * v[i]), -8e-12, 8e-12);
        }
    }

    [Fact]
    public void Apply_PlaneAtAWall_MinimisesOverTheBox()
    {
        // A saddle-free tilt that pushes out of the box on the right and couples the axes.
        var potential = new PlanePotential(0.5, 2.0, 10, 0.1);
        var box = new Interval(-1, 1);
        var map = new ProximalMap(potential, new Domain(box, box));
        const double t = 0.2;
        var (x, y) = Lattice(9, 1);
        double[] u = new double[x.Length], v = new double[x.Length];
        Assert.Equal(0, map.Apply(t, x, y, u, v));
        for (var i = 0; i < x.Length; i++)
        {
            double Objective(double a, double b) => ((a - x[i]) * (a - x[i]) + (b - y[i]) * (b - y[i])) / (2 * t) + potential.ValueAt(a, b);
            var best = Objective(u[i], v[i]);
            Assert.InRange(u[i], -1, 1);
            Assert.InRange(v[i], -1, 1);
            foreach (var (da, db) in new[] { (1e-5, 0.0), (-1e-5, 0), (0, 1e-5), (0, -1e-5), (1e-5, 1e-5), (-1e-5, 1e-5), (1e-5, -1e-5), (-1e-5, -1e-5) })
                Assert.True(Objective(Math.Clamp(u[i] + da, -1, 1), Math.Clamp(v[i] + db, -1, 1)) >= best - 1e-15);
        }
    }

    [Fact]
    public void Apply_PlaneWithAxisKinks_LandsExactlyOnThem()
    {
        // V = |x| + 0.5·|y − 0.25| + x²/2 + y²: sums over the axes, both proximal points in closed form.
        var map = new ProximalMap(FormulaPotential.Parse("abs(x) + 0.5*abs(y-0.25) + x^2/2 + y^2", 2), new Domain(Wide, Wide));
        const double t = 0.3;
        var (x, y) = Lattice(61);
        double[] u = new double[x.Length], v = new double[x.Length];
        Assert.Equal(0, map.Apply(t, x, y, u, v));
        int onX = 0, onY = 0;
        for (var i = 0; i < x.Length; i++)
        {
            // Away from the kinks (x ∓ t)/(1 + t); at a kink the interval of the two slopes holds 0.
            Assert.Equal(Math.Sign(x[i]) * Math.Max(0, Math.Abs(x[i]) - t) / (1 + t), u[i], 11);
            var below = (y[i] + 0.5 * t) / (1 + 2 * t);
            var above = (y[i] - 0.5 * t) / (1 + 2 * t);
            Assert.Equal(above > 0.25 ? above : below < 0.25 ? below : 0.25, v[i], 11);
            onX += u[i] == 0 ? 1 : 0;
            onY += v[i] == 0.25 ? 1 : 0;
        }

        Assert.InRange(onX, 100, 61 * 61 / 4);
        Assert.InRange(onY, 61, 61 * 61 / 4);
    }

    [Theory]
    [InlineData("sqrt(x^2+y^2)", 0, 0)]
    [InlineData("2*sqrt((x-0.5)^2+(y+1)^2) + ((x-0.5)^2+(y+1)^2)/2", 0.5, -1)]
    public void Apply_PlaneWithAKinkAtAPoint_ShrinksAlongTheRay(string formula, double centerX, double centerY)
    {
        var (slope, curvature) = centerX == 0 ? (1.0, 0.0) : (2.0, 1.0);
        var map = new ProximalMap(FormulaPotential.Parse(formula, 2), new Domain(Wide, Wide));
        const double t = 0.4;
        var (x, y) = Lattice(41);
        double[] u = new double[x.Length], v = new double[x.Length];
        Assert.Equal(0, map.Apply(t, x, y, u, v));
        var atPoint = 0;
        for (var i = 0; i < x.Length; i++)
        {
            var (dx, dy) = (x[i] - centerX, y[i] - centerY);
            var r = Math.Sqrt(dx * dx + dy * dy);
            var share = r > 0 ? Math.Max(0, r - t * slope) / (1 + t * curvature) / r : 0;
            Assert.Equal(centerX + share * dx, u[i], 10);
            Assert.Equal(centerY + share * dy, v[i], 10);
            atPoint += u[i] == centerX && v[i] == centerY ? 1 : 0;
        }

        Assert.InRange(atPoint, 5, 60);
    }

    private static (double[] X, double[] Y) Lattice(int n, double half = 4)
    {
        double[] x = new double[n * n], y = new double[n * n];
        for (var i = 0; i < n * n; i++)
            (x[i], y[i]) = (-half + 2 * half * (i % n) / (n - 1), -half + 2 * half * (i / n) / (n - 1));
        return (x, y);
    }

    [Fact]
    public void IsUnique_LongStep_SaysNo()
    {
        var map = new ProximalMap(new PolynomialPotential(0, 0, -0.5, 0, 0.25), new Domain(Wide));
        Assert.InRange(map.LeastCurvature, -1.0001, -0.999);
        Assert.False(map.IsUnique(1.1));
        // Still a local minimiser, never a failure.
        var x = Sweep(-4, 4, 999);
        var y = new double[x.Length];
        Assert.Equal(0, map.Apply(5, x, [], y, []));
        for (var i = 0; i < x.Length; i++)
            Assert.True(1 + 5 * (3 * y[i] * y[i] - 1) >= -1e-6);
    }

    [Fact]
    public void Apply_NotANumber_IsCountedNotReturnedAsRight()
    {
        var map = new ProximalMap(new PolynomialPotential(0, 0, double.NaN, 0, 1), new Domain(Wide));
        Assert.Equal(3, map.Apply(0.1, [0.1, 0.2, 0.3], [], new double[3], []));
    }

    [Fact]
    public void Apply_AllocatesNothing()
    {
        var map = new ProximalMap(new PolynomialPotential(0, 0, -0.5, 0, 0.25), new Domain(Wide));
        var x = Sweep(-4, 4, 1000);
        var y = new double[1000];
        map.Apply(0.1, x, [], y, []);
        var before = GC.GetAllocatedBytesForCurrentThread();
        map.Apply(0.1, x, [], y, []);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }
}
