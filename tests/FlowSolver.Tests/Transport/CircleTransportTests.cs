using CsCheck;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Transport;

/// <summary>Mutation tried: leaving out the jumps of the second law in the derivative of the cost fails the tests with samples and with empty cells.</summary>
public class CircleTransportTests
{
    private static readonly Interval Circle = new(-1, 2, AxisEnds.Periodic);

    private static Density OnCircle(params double[] values) => new Density(new Grid(new Axis(Circle, values.Length)), values).Normalised();

    private static readonly Gen<Density> AnyDensity = Gen.OneOf(Gen.Double[0, 1], Gen.Const(0.0), Gen.Double[0, 1e-12]).Array[4, 40]
        .Where(values => values.Sum() > 0.01).Select(OnCircle);

    [Fact]
    public void Distance_UniformAndEvenPoints_MatchesClosedForm()
    {
        // n even points against the uniform law: W2² = (L/n)²/12, wherever the points are.
        var uniform = OnCircle(1, 1, 1, 1, 1);
        Assert.Equal(3 / Math.Sqrt(12), CircleTransport.Distance([0.7], uniform), 14);
        Assert.Equal(1.5 / Math.Sqrt(12), CircleTransport.Distance([-0.9, 0.6], uniform), 14);
        Assert.Equal(0.3 / Math.Sqrt(12), CircleTransport.Distance([.. Enumerable.Range(0, 10).Select(k => -0.95 + 0.3 * k)], uniform), 14);
    }

    [Theory]
    [InlineData(1)]
    [InlineData(20)]
    [InlineData(45)]
    [InlineData(60)]
    [InlineData(97)]
    // Five cells wide and at most 45 of 100 away: no part of the lump has the other way round shorter.
    public void Distance_NarrowLumpTurned_IsTheShorterWay(int cells)
    {
        double[] lump = [1, 3, 4, 2, 1];
        var first = new double[100];
        var second = new double[100];
        for (var i = 0; i < 5; i++)
        {
            first[(98 + i) % 100] = lump[i];
            second[(98 + i + cells) % 100] = lump[i];
        }

        Assert.Equal(0.03 * Math.Min(cells, 100 - cells), CircleTransport.Distance(OnCircle(first), OnCircle(second)), 13);
    }

    [Fact]
    public void Distance_NearDensities_KeepsRelativeAccuracy()
    {
        // 1 + ε cos x with x on a circle of length 2π, small ε: W2 = ε/√2 + O(ε²), by linearising; cells of width h change that by O(h²).
        var circle = new Interval(0, 2 * Math.PI, AxisEnds.Periodic);
        var grid = new Grid(new Axis(circle, 256));
        var even = new Density(grid, [.. grid.X.Centers().Select(_ => 1.0)]);
        foreach (var epsilon in new[] { 1e-4, 1e-7, 1e-10 })
        {
            var tilted = new Density(grid, [.. grid.X.Centers().Select(x => 1 + epsilon * Math.Cos(x))]);
            Assert.Equal(1, CircleTransport.Distance(even, tilted) / (epsilon / Math.Sqrt(2)), 2e-4);
        }
    }

    [Fact]
    public void Distance_Samples_MatchesEveryCyclicAssignment()
        => Gen.Select(Gen.Double[-1, 2].Array[1, 7], Gen.Double[-1, 2].Array[1, 7]).Sample(pair =>
        {
            var (first, second) = pair;
            Array.Sort(first);
            Array.Sort(second);
            Assert.Equal(BruteForce(first, second, 3), CircleTransport.Distance(first, second, 3), 1e-12);
        });

    [Fact]
    public void Distance_SamplesToDensity_MatchesManyQuantilesOfIt()
        => Gen.Select(Gen.Double[-1, 2].Array[1, 15], AnyDensity).Sample(pair =>
        {
            var (samples, density) = pair;
            Array.Sort(samples);
            var quantiles = LineTransportTests.Quantiles(density, 4096);
            var bound = LineTransport.Distance(quantiles, density);
            Assert.Equal(CircleTransport.Distance(samples, quantiles, 3), CircleTransport.Distance(samples, density), bound + 1e-12);
        }, iter: 60);

    [Fact]
    public void Distance_Densities_MatchesManyQuantilesOfThem()
        => Gen.Select(AnyDensity, AnyDensity).Sample(pair =>
        {
            var (first, second) = (LineTransportTests.Quantiles(pair.Item1, 4096), LineTransportTests.Quantiles(pair.Item2, 4096));
            var bound = LineTransport.Distance(first, pair.Item1) + LineTransport.Distance(second, pair.Item2);
            Assert.Equal(CircleTransport.Distance(first, second, 3), CircleTransport.Distance(pair.Item1, pair.Item2), bound + 1e-12);
        }, iter: 60);

    [Fact]
    public void Distance_AnyThree_ObeysTheAxioms()
        => Gen.Select(AnyDensity, AnyDensity, AnyDensity).Sample(three =>
        {
            var (a, b, c) = three;
            var (ab, bc, ac) = (CircleTransport.Distance(a, b), CircleTransport.Distance(b, c), CircleTransport.Distance(a, c));
            Assert.Equal(ab, CircleTransport.Distance(b, a), 1e-12);
            Assert.True(ac <= ab + bc + 1e-12, $"{ac} > {ab} + {bc}");
            Assert.Equal(0, CircleTransport.Distance(a, a));
            Assert.True(ab <= LineTransport.Distance(a, b) + 1e-12);
        });

    [Fact]
    public void Distance_BothTurned_DoesNotChange()
        => Gen.Select(Gen.Double[0, 1].Array[12], Gen.Double[0, 1].Array[12], Gen.Int[0, 11]).Sample(three =>
        {
            var (a, b, turn) = three;
            double[] Turned(double[] values) => [.. values.Select((_, i) => values[(i + turn) % values.Length])];
            Assert.Equal(
                CircleTransport.Distance(OnCircle(a), OnCircle(b)), CircleTransport.Distance(OnCircle(Turned(a)), OnCircle(Turned(b))), 1e-12);
        });

    [Fact]
    public void Interpolate_LumpsAcrossTheCut_GoesTheShorterWay()
    {
        var first = new double[12];
        var second = new double[12];
        first[10] = 1;
        second[2] = 1;
        var between = CircleTransport.Interpolate(OnCircle(first), OnCircle(second), 0.5);
        Assert.Equal(0, Array.IndexOf(between.Values, between.Values.Max()));
        Assert.Equal(4, between.Values[0], 12);
    }

    [Fact]
    public void Between_Circle_FoldsSamples()
    {
        var uniform = OnCircle(1, 1, 1, 1);
        Assert.Equal(1.5 / Math.Sqrt(12), SampleDistance.Between([3.6, -3.9], [], uniform, WorkerTeam.Alone)!.Value.Distance, 13);
        Assert.Equal(0.2, SampleDistance.Between([1.9], [], [5.1], [], new Domain(Circle), WorkerTeam.Alone)!.Value.Distance, 13);
        Assert.Equal(0, DensityDistance.Between(uniform, uniform, WorkerTeam.Alone)!.Value.Distance);
    }

    private static double BruteForce(double[] first, double[] second, double circumference)
    {
        var copies = first.Length * second.Length;
        var best = double.PositiveInfinity;
        for (var cut = -copies; cut <= copies; cut++)
        {
            var sum = 0.0;
            for (var k = 0; k < copies; k++)
            {
                var turned = k + cut;
                var turn = (int)Math.Floor((double)turned / copies);
                var other = second[(turned - turn * copies) / first.Length] + turn * circumference;
                sum += Math.Pow(first[k / second.Length] - other, 2);
            }

            best = Math.Min(best, sum / copies);
        }

        return Math.Sqrt(best);
    }
}
