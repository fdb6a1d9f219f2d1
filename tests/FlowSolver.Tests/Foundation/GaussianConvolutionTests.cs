using FlowSolver.Foundation;

namespace FlowSolver.Tests.Foundation;

public class GaussianConvolutionTests
{
    /// <summary>
    /// e^(−a) Iₙ(a) at a = 0.5 and 1. I₀ and I₁: M. Abramowitz, I. Stegun, Handbook of Mathematical Functions (1964), Tables 9.8-9.11 (recomputed). Mutation tried: ratio of neighbours with 2n for 2(n + 1).
    /// </summary>
    [Theory]
    [InlineData(0.5, 1.063483370741324, 0.2578943053908963)]
    [InlineData(1.0, 1.266065877752008, 0.565159103992485)]
    public void Weights_Narrow_AreTheLatticeHeatKernel(double variance, double besselZero, double besselOne)
    {
        var kernel = new GaussianKernel(variance);
        Assert.False(kernel.IsSampled);
        Assert.Equal(besselZero * Math.Exp(-variance), kernel.Weights[kernel.Radius], 1e-15);
        Assert.Equal(besselOne * Math.Exp(-variance), kernel.Weights[kernel.Radius + 1], 1e-15);
    }

    /// <summary>Sum 1 and the variance asked for, on both sides of the border between lattice kernel and samples. Mutation tried: samples from 0.8 spacings on.</summary>
    [Theory]
    [InlineData(0)]
    [InlineData(1e-6)]
    [InlineData(0.3)]
    [InlineData(1.68)]
    [InlineData(1.70)]
    [InlineData(40)]
    [InlineData(5000)]
    public void Weights_AnyVariance_HaveItAndSumToOne(double variance)
    {
        var kernel = new GaussianKernel(variance);
        var (sum, second) = (0.0, 0.0);
        for (var n = -kernel.Radius; n <= kernel.Radius; n++)
        {
            sum += kernel.Weights[n + kernel.Radius];
            second += kernel.Weights[n + kernel.Radius] * n * n;
        }

        Assert.Equal(1, sum, 1e-14);
        Assert.Equal(variance, second, 4.1e-13 * variance + 1e-18);
    }

    /// <summary>
    /// Against the double sum over mirrored or wrapped neighbours, relative in each cell, on sizes that fill no whole strip, with kernels narrower and wider than the axis. Mutation tried: the last, partial strip
    /// of columns written with the stride of the panel.
    /// </summary>
    [Theory]
    [InlineData(64, 1, false, false, 3.0)]
    [InlineData(45, 1, true, true, 2.0)]
    [InlineData(37, 1, true, true, 30.0)]
    [InlineData(64, 96, false, false, 2.5)]
    [InlineData(53, 47, false, true, 0.6)]
    [InlineData(40, 70, true, false, 4.0)]
    [InlineData(21, 33, true, true, 25.0)]
    [InlineData(5, 3, false, false, 9.0)]
    public void Apply_AnySize_IsTheSumOverImages(int countX, int countY, bool periodicX, bool periodicY, double deviation)
    {
        var varianceY = countY == 1 ? 0 : 0.7 * deviation * deviation;
        var random = new Random(5);
        var source = new double[countX * countY];
        for (var i = 0; i < source.Length; i++)
            source[i] = Math.Exp(-30 * random.NextDouble());
        var expected = Along(source, countX, countY, 1, countX, periodicX, deviation * deviation);
        if (countY > 1)
            expected = Along(expected, countY, countX, countX, 1, periodicY, varianceY);
        var found = new double[source.Length];
        new GaussianConvolution(countX, countY, periodicX, periodicY, deviation * deviation, varianceY).Apply(source, found, WorkerTeam.Alone);
        for (var i = 0; i < found.Length; i++)
            Assert.Equal(1, found[i] / expected[i], 1e-12);
        Assert.Equal(1, found.Sum() / source.Sum(), 1e-13);
    }

    private static double[] Along(double[] source, int count, int lines, int stride, int lineStride, bool periodic, double variance)
    {
        var kernel = new GaussianKernel(variance);
        var result = new double[source.Length];
        var period = periodic ? count : 2 * count;
        for (var line = 0; line < lines; line++)
        {
            for (var i = 0; i < count; i++)
            {
                for (var n = -kernel.Radius; n <= kernel.Radius; n++)
                {
                    var place = ((i + n) % period + period) % period;
                    place = place < count ? place : period - 1 - place;
                    result[line * lineStride + i * stride] += kernel.Weights[n + kernel.Radius] * source[line * lineStride + place * stride];
                }
            }
        }

        return result;
    }

    /// <summary>A point mass far from everything: the tails are those of the normal density, 1e-25 below the middle. Mutation tried: weights cut at 1e-16.</summary>
    [Fact]
    public void Apply_PointMass_HasTailsRightRelativeToThemselves()
    {
        var source = new double[201];
        source[100] = 1;
        var found = new double[201];
        new GaussianConvolution(201, 1, false, false, 64, 0).Apply(source, found, WorkerTeam.Alone);
        for (var n = 0; n <= 85; n++)
            Assert.Equal(1, found[100 + n] / (Math.Exp(-0.5 * n * n / 64.0) / Math.Sqrt(2 * Math.PI * 64)), 1e-12);
    }

    /// <summary>
    /// A wide density on a long line goes over wider cells: against the double sum, relative in each cell, at walls and on a circle, and wider than the line too. Mutation tried: wide cells centred on a fine cell (error 1e-3).
    /// </summary>
    [Theory]
    [InlineData(1024, false, 30.0)]
    [InlineData(1536, true, 75.0)]
    [InlineData(512, false, 900.0)]
    public void Apply_WideOnALine_IsTheSumOverImages(int count, bool periodic, double deviation)
    {
        var random = new Random(9);
        var source = new double[count];
        for (var i = 0; i < count; i++)
            source[i] = Math.Exp(-5 * random.NextDouble() - (i < count / 2 ? 20 : 0));
        var expected = Along(source, count, 1, 1, count, periodic, deviation * deviation);
        var found = (double[])source.Clone();
        new GaussianConvolution(count, 1, periodic, false, deviation * deviation, 0).Apply(found, found, WorkerTeam.Alone);
        for (var i = 0; i < count; i++)
            Assert.Equal(1, found[i] / expected[i], 1e-12);
    }

    /// <summary>In place, any team, and once warm without allocation. Mutation tried: a work array made anew for each strip.</summary>
    [Fact]
    public void Apply_AnyTeam_GivesTheSameBytesAndAllocatesNothing()
    {
        var random = new Random(3);
        var source = new double[130 * 90];
        for (var i = 0; i < source.Length; i++)
            source[i] = random.NextDouble();
        var (alone, shared) = ((double[])source.Clone(), (double[])source.Clone());
        using var team = new WorkerTeam(3);
        var convolution = new GaussianConvolution(130, 90, false, true, 6, 3, 3);
        convolution.Apply(alone, alone, WorkerTeam.Alone);
        convolution.Apply(shared, shared, team);
        Assert.Equal(alone, shared);
        var before = GC.GetAllocatedBytesForCurrentThread();
        convolution.Apply(alone, alone, WorkerTeam.Alone);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }

    [Theory]
    [InlineData(-1.0)]
    [InlineData(double.NaN)]
    public void Kernel_BadVariance_IsRefused(double variance)
        => Assert.Contains("variance was", Assert.ThrowsAny<ArgumentException>(() => new GaussianKernel(variance)).Message, StringComparison.Ordinal);
}
