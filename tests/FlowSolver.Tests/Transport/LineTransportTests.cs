using CsCheck;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Transport;

/// <summary>
/// Mutations tried: dropping the middle term first·last of the integral fails nearly all; dropping the low part of the cumulative masses fails
/// Distance_TinyMassMoved_IsSeen.
/// </summary>
public class LineTransportTests
{
    private static readonly Interval Unit = new(0, 1);

    private static Density OnUnit(params double[] values) => new(new Grid(new Axis(Unit, values.Length)), values);

    private static readonly Gen<Density> AnyDensity = Gen.Select(
        Gen.OneOf(Gen.Double[0, 1], Gen.Const(0.0), Gen.Double[0, 1e-12]).Array[4, 40], Gen.Int[0, 1000])
        .Where(pair => pair.Item1.Sum() > 0.01)
        .Select(pair => new Density(new Grid(new Axis(new Interval(-1, 2), pair.Item1.Length)), pair.Item1).Normalised());

    [Fact]
    public void Distance_TwoBoxes_MatchesClosedForm()
    {
        // Uniform on [1/4, 1/2] and on [1/2, 1]: W2² = (mean difference)² + (difference of widths)²/12.
        var distance = LineTransport.Distance(OnUnit(0, 1, 0, 0), OnUnit(0, 0, 0, 0, 1, 1, 1, 1));
        Assert.Equal(Math.Sqrt(0.375 * 0.375 + 0.25 * 0.25 / 12), distance, 15);
    }

    [Fact]
    public void Distance_SameLawOnFinerGrid_IsZero()
    {
        var coarse = OnUnit(0.4, 1.2, 0, 2.4);
        var fine = OnUnit(0.4, 0.4, 1.2, 1.2, 0, 0, 2.4, 2.4);
        Assert.InRange(LineTransport.Distance(coarse, fine), 0, 1e-16);
        Assert.Equal(0, LineTransport.Distance(coarse, coarse));
    }

    [Theory]
    [InlineData(4)]
    [InlineData(64)]
    [InlineData(4096)]
    public void Distance_NearDensities_KeepsRelativeAccuracy(int cells)
    {
        // 1 + ε on the lower half, 1 − ε on the upper: W2² = ε²/12 for every ε, by integrating the linear difference of the quantile functions.
        foreach (var power in new[] { 8, 20, 33, 40 })
        {
            var epsilon = Math.ScaleB(1, -power);
            var even = new double[cells];
            var tilted = new double[cells];
            for (var i = 0; i < cells; i++)
                (even[i], tilted[i]) = (1, i < cells / 2 ? 1 + epsilon : 1 - epsilon);
            var distance = LineTransport.Distance(OnUnit(even), OnUnit(tilted));
            Assert.Equal(1, distance / (epsilon / Math.Sqrt(12)), 1e-13 + 1e-16 / epsilon);
        }
    }

    [Fact]
    public void Distance_ShiftedByCells_IsTheShift()
    {
        // Tails down to 1e-60 on one side and cut off on the other: every part moves by the same way.
        var grid = new Grid(new Axis(new Interval(-4, 4), 800));
        var first = new double[800];
        var second = new double[800];
        for (var i = 0; i < 700; i++)
            first[i + 3] = second[i + 50] = Math.Exp(-0.5 * Math.Pow((i - 200) / 20.0, 2));
        Assert.Equal(0.47, LineTransport.Distance(new Density(grid, first), new Density(grid, second)), 14);
    }

    [Theory]
    [InlineData(1e-12)]
    [InlineData(1e-20)]
    [InlineData(1e-26)]
    public void Distance_TinyMassMoved_IsSeen(double mass)
    {
        // Behind all other mass, where a plain running sum would lose it below 1e-16: a share m moved by a half gives W2² = m/4.
        var distance = LineTransport.Distance(OnUnit(1, 0, 0, mass, 0, 0, 0, 0), OnUnit(1, 0, 0, 0, 0, 0, 0, mass));
        Assert.Equal(1, distance / (0.5 * Math.Sqrt(mass)), 1e-5);
    }

    [Fact]
    public void Distance_OneSample_IsRootOfSecondMomentAboutIt()
    {
        var density = OnUnit(0, 1, 1, 0);
        Assert.Equal(Math.Sqrt(0.04 + 0.25 / 12), LineTransport.Distance([0.7], density), 15);
        Assert.Equal(Math.Sqrt(2.25 + 0.25 / 12), LineTransport.Distance([2.0], density), 15);
    }

    [Fact]
    public void Distance_Samples_MatchesSortedAssignment()
        => Gen.Select(Gen.Double[-3, 3].Array[1, 12], Gen.Double[-3, 3].Array[1, 12]).Sample(pair =>
        {
            var (first, second) = pair;
            Array.Sort(first);
            Array.Sort(second);
            var sum = 0.0;
            var copies = first.Length * second.Length;
            for (var k = 0; k < copies; k++)
                sum += Math.Pow(first[k / second.Length] - second[k / first.Length], 2);
            Assert.Equal(Math.Sqrt(sum / copies), LineTransport.Distance(first, second), 1e-12);
        });

    [Fact]
    public void Distance_SamplesToDensity_MatchesManyQuantilesOfIt()
        => Gen.Select(Gen.Double[-1, 2].Array[1, 15], AnyDensity).Sample(pair =>
        {
            var (samples, density) = pair;
            Array.Sort(samples);
            var quantiles = Quantiles(density, 20000);
            // Midpoint quantiles are within 3/20000 plus the jumps' share of the law itself.
            var bound = LineTransport.Distance(quantiles, density);
            Assert.InRange(bound, 0, 3e-2);
            Assert.Equal(LineTransport.Distance(samples, quantiles), LineTransport.Distance(samples, density), bound + 1e-12);
        }, iter: 40);

    [Fact]
    public void Distance_AnyThree_ObeysTheAxioms()
        => Gen.Select(AnyDensity, AnyDensity, AnyDensity).Sample(three =>
        {
            var (a, b, c) = three;
            var (ab, bc, ac) = (LineTransport.Distance(a, b), LineTransport.Distance(b, c), LineTransport.Distance(a, c));
            Assert.Equal(ab, LineTransport.Distance(b, a), 1e-13);
            Assert.True(ac <= ab + bc + 1e-13, $"{ac} > {ab} + {bc}");
            Assert.Equal(0, LineTransport.Distance(a, a));
        });

    /// <summary>M. Gelbrich, On a formula for the L2 Wasserstein metric, Math. Nachr. 147 (1990) 185-203 (from memory): a bound from two moments.</summary>
    [Fact]
    public void Distance_AnyTwo_IsAboveTheGelbrichBound()
        => Gen.Select(AnyDensity, AnyDensity).Sample(pair =>
        {
            var (a, b) = (MomentsOf(pair.Item1), MomentsOf(pair.Item2));
            var bound = Math.Sqrt(Math.Pow(a.Mean - b.Mean, 2) + Math.Pow(a.Deviation - b.Deviation, 2));
            Assert.True(LineTransport.Distance(pair.Item1, pair.Item2) >= bound - 1e-13);
        });

    [Fact]
    public void MapEdges_AnyTwo_CarriesTheMassBelow()
        => Gen.Select(AnyDensity, AnyDensity).Sample(pair =>
        {
            var (from, to) = (new QuantileFunction(pair.Item1), new QuantileFunction(pair.Item2));
            var images = LineTransport.MapEdges(pair.Item1, pair.Item2);
            for (var i = 0; i < images.Length; i++)
                Assert.Equal(from.MassAtEdges[i], to.MassBelow(images[i]), 1e-12);
        });

    [Fact]
    public void Interpolate_TwoBoxes_GivesTheBoxBetween()
    {
        // Halfway from the box [0, 1/8] to [1/2, 1] lies [1/4, 9/16].
        var between = LineTransport.Interpolate(OnUnit(8, 0, 0, 0, 0, 0, 0, 0), OnUnit(0, 0, 0, 0, 2, 2, 2, 2), 0.5);
        Assert.Equal(new[] { 0, 0, 3.2, 3.2, 1.6, 0, 0, 0 }, between.Values.Select(value => Math.Round(value, 12)));
    }

    [Fact]
    public void Interpolate_AnyTwo_LiesOnTheShortestPath()
        => Gen.Select(AnyDensity, AnyDensity, Gen.Double[0, 1]).Sample(three =>
        {
            var (from, to, fraction) = three;
            var distance = LineTransport.Distance(from, to);
            var between = LineTransport.Interpolate(from, to, fraction);
            // Spreading over cells moves mass by less than a cell.
            Assert.Equal(1, between.Mass, 12);
            Assert.Equal(fraction * distance, LineTransport.Distance(from, between), between.Grid.X.Width);
            Assert.Equal((1 - fraction) * distance, LineTransport.Distance(between, to), between.Grid.X.Width);
        });

    [Fact]
    public void Distance_BadSamples_SaysSo()
    {
        var density = OnUnit(1, 1, 1, 1);
        Assert.Contains("empty", Assert.Throws<ArgumentException>(() => LineTransport.Distance([], density)).Message, StringComparison.Ordinal);
        Assert.Contains("ascending", Assert.Throws<ArgumentException>(() => LineTransport.Distance([1, 0], density)).Message, StringComparison.Ordinal);
        Assert.Contains("finite", Assert.Throws<ArgumentException>(() => LineTransport.Distance([0, double.NaN], density)).Message, StringComparison.Ordinal);
        Assert.Contains("above 0", Assert.Throws<ArgumentException>(() => LineTransport.Distance([0], OnUnit(0, 0, 0, 0))).Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Between_Line_IsExactAndSortsSamples()
    {
        var density = OnUnit(1, 1, 1, 1);
        var bracket = SampleDistance.Between([0.75, 0.25], [], density, WorkerTeam.Alone)!.Value;
        Assert.Equal(Math.Sqrt(0.25 / 12), bracket.Distance, 15);
        Assert.Equal(bracket, TransportBracket.Exact(bracket.Distance));
        Assert.Equal(0, DensityDistance.Between(density, density, WorkerTeam.Alone)!.Value.Distance);
        Assert.Equal(0.5, SampleDistance.Between([1, 0], [], [0.5], [], new Domain(Unit), WorkerTeam.Alone)!.Value.Distance, 15);
    }

    [Fact]
    public void Distance_Repeated_AllocatesNothing()
    {
        var density = OnUnit(1, 2, 3, 4);
        var other = OnUnit(4, 3, 2, 1, 0);
        double[] samples = [0.1, 0.2, 0.9];
        LineTransport.Distance(density, other);
        LineTransport.Distance(samples, density);
        var before = GC.GetAllocatedBytesForCurrentThread();
        LineTransport.Distance(density, other);
        LineTransport.Distance(samples, density);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }

    internal static double[] Quantiles(Density density, int count)
    {
        var quantile = new QuantileFunction(density);
        return [.. Enumerable.Range(0, count).Select(k => quantile.Position((k + 0.5) / count))];
    }

    internal static (double Mean, double Deviation) MomentsOf(Density density)
    {
        var axis = density.Grid.X;
        double mean = 0, second = 0;
        for (var i = 0; i < axis.Cells; i++)
        {
            mean += density.Values[i] * axis.Width * axis.Center(i);
            second += density.Values[i] * axis.Width * (axis.Center(i) * axis.Center(i) + axis.Width * axis.Width / 12);
        }

        return (mean, Math.Sqrt(second - mean * mean));
    }
}
