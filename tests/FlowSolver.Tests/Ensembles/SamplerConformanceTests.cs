using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// What every sampler of the catalogue must show. Statistical bounds are in standard errors under fixed seeds.
/// Mutations tried: tiles drawing their noise from number 0 instead of the walker's own; Advance_BoxWithoutForce_StaysUniform failed. The fold left out of AxisFold.FoldInPlace; the same failed for all samplers but those that refuse.
/// </summary>
public class SamplerConformanceTests
{
    public static TheoryData<string> Names => [.. SamplerCatalogue.All.Select(sampler => sampler.Traits.Name)];

    private static Sampler Find(string name) => SamplerCatalogue.Find(name)!;

    private static Problem Quadratic(double curvature, double temperature, double variance, double mobility = 1) => new(
        new PolynomialPotential(0, 0, curvature / 2), temperature, new Domain(new Interval(-12, 12)), new GaussianStart(0, variance), mobility);

    private static Problem DoubleWell(int dimension, AxisEnds ends = AxisEnds.Reflecting) => dimension == 1
        ? new Problem(new PolynomialPotential(0, 0.1, -0.5, 0, 0.25), 0.5, new Domain(new Interval(-3.5, 3.5, ends)), new GaussianStart(-0.8, 0.16))
        : new Problem(new PlanePotential(-0.5, 0.3, 1, 0.5), 0.5, new Domain(new Interval(-3.5, 3.5, ends), new Interval(-3, 3, ends)),
            new GaussianStart(-0.6, 0.16, 0.4, 0.2, 0.05));

    [Theory]
    [MemberData(nameof(Names))]
    public void Begin_CountsTimeAndSteps(string name)
    {
        var run = Find(name).Begin(DoubleWell(1), 33, 1, WorkerTeam.Alone);
        run.Advance(0.02);
        run.Advance(0.03);
        Assert.Equal(2, run.StepsTaken);
        Assert.Equal(0.05, run.Time, 15);
        Assert.Equal(33, run.X.Length);
        Assert.Equal(0, run.Y.Length);
        Assert.Throws<ArgumentOutOfRangeException>(() => run.Advance(0));
    }

    [Theory]
    [MemberData(nameof(Names))]
    public void Advance_AnyTeam_SameBytes(string name)
    {
        using var two = new WorkerTeam(2);
        using var three = new WorkerTeam(3);
        foreach (var dimension in new[] { 1, 2 })
        {
            foreach (var ends in new[] { AxisEnds.Reflecting, AxisEnds.Periodic })
            {
                var runs = new[] { WorkerTeam.Alone, two, three }
                    .Select(team => Find(name).Begin(DoubleWell(dimension, ends), 35_003, 9, team)).ToArray();
                for (var k = 0; k < 4; k++)
                {
                    foreach (var run in runs)
                        Assert.Null(run.Advance(0.03).Failure);
                }

                Assert.True(runs[0].X.SequenceEqual(runs[1].X) && runs[0].X.SequenceEqual(runs[2].X));
                Assert.True(runs[0].Y.SequenceEqual(runs[1].Y) && runs[0].Y.SequenceEqual(runs[2].Y));
                foreach (var x in runs[0].X)
                    Assert.InRange(x, -3.5, 3.5);
            }
        }
    }

    [Theory]
    [MemberData(nameof(Names))]
    public void Advance_FewerWalkers_AreTheFirstOnes(string name)
    {
        // A walker depends on the seed and its own number, not on how many there are.
        var many = Find(name).Begin(DoubleWell(1), 2000, 4, WorkerTeam.Alone);
        var few = Find(name).Begin(DoubleWell(1), 777, 4, WorkerTeam.Alone);
        for (var k = 0; k < 5; k++)
        {
            many.Advance(0.05);
            few.Advance(0.05);
        }

        Assert.Equal(many.X[..777].ToArray(), few.X.ToArray());
    }

    [Theory]
    [MemberData(nameof(Names))]
    public void Advance_OtherSeed_OtherWalkers(string name)
    {
        var one = Find(name).Begin(DoubleWell(1), 1000, 1, WorkerTeam.Alone);
        var other = Find(name).Begin(DoubleWell(1), 1000, 2, WorkerTeam.Alone);
        one.Advance(0.05);
        other.Advance(0.05);
        var same = 0;
        for (var i = 0; i < 1000; i++)
            same += one.X[i] == other.X[i] ? 1 : 0;
        Assert.InRange(same, 0, 1);
    }

    [Theory]
    [MemberData(nameof(Names))]
    public void Advance_BoxWithoutForce_StaysUniform(string name)
    {
        // No force: the uniform law is kept by reflection and by wrapping alike; a leak or a pile at a wall would show.
        foreach (var ends in new[] { AxisEnds.Reflecting, AxisEnds.Periodic })
        {
            var start = new FunctionStart((_, _, value) => value.Fill(1), "1");
            var run = Find(name).Begin(
                new Problem(new PolynomialPotential(0, 0, 0, 0, 0), 0.5, new Domain(new Interval(-1, 0.5, ends)), start), 100_000, 5, WorkerTeam.Alone);
            for (var k = 0; k < 6; k++)
                Assert.Null(run.Advance(0.3).Failure);
            Assert.InRange(SampleStatistics.Kolmogorov(run.X, x => (x + 1) / 1.5), 0.3, 1.95);
        }
    }

    [Theory]
    [MemberData(nameof(Names))]
    public void Advance_AllocatesNothing(string name)
    {
        foreach (var dimension in new[] { 1, 2 })
        {
            var run = Find(name).Begin(DoubleWell(dimension), 3000, 1, WorkerTeam.Alone);
            run.Advance(0.02);
            var before = GC.GetAllocatedBytesForCurrentThread();
            for (var k = 0; k < 3; k++)
                run.Advance(0.02);
            Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
        }
    }

    [Theory]
    [MemberData(nameof(Names))]
    public void Begin_PotentialWithAJump_IsRefused(string name)
    {
        var problem = new Problem(new JumpPotential(), 1, new Domain(new Interval(-1, 1)), new GaussianStart(0, 0.1));
        Assert.Contains("jumps by 2 at x = 0.25", Assert.Throws<InputException>(() => Find(name).Begin(problem, 10, 1, WorkerTeam.Alone)).Message);
    }

    private sealed class JumpPotential : Potential
    {
        public override int Dimension => 1;

        public override string Description => "step";

        public override bool IsSmooth => false;

        public override IReadOnlyList<Kink> FindKinks(Interval interval) => [new(0.25, 0, 0, 2)];

        public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value)
        {
            for (var i = 0; i < x.Length; i++)
                value[i] = x[i] > 0.25 ? 2 : 0;
        }

        public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
            => gradientX.Clear();

        public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
        {
            Value(x, y, target.Value);
            target.GradientX.Clear();
            target.HessianXX.Clear();
        }
    }
}
