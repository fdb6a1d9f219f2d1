using FlowSolver.Diagnostics;
using FlowSolver.Grids;
using FlowSolver.Problems;

namespace FlowSolver.Tests.Diagnostics;

/// <summary>Mutations tried and seen to fail: covariance taken without the mean of y removed; circular mean without the shift by the axis's start; divisor N − 1.</summary>
public class MomentMeasureTests
{
    [Fact]
    public void Of_CorrelatedGaussian_ReturnsItsMoments()
    {
        var grid = new Grid(new Axis(new Interval(-8, 9), 120), new Axis(new Interval(-11, 10), 140));
        var density = StartOnGrid.Create(new GaussianStart(0.3, 0.5, -0.7, 0.9, 0.25), grid);
        var moments = MomentMeasure.Of(density);
        Assert.Equal(1, moments.Mass, 1e-13);
        Assert.Equal(0.3, moments.MeanX, 1e-12);
        Assert.Equal(-0.7, moments.MeanY, 1e-12);
        Assert.Equal(0.5, moments.VarianceX, 1e-12);
        Assert.Equal(0.9, moments.VarianceY, 1e-12);
        Assert.Equal(0.25, moments.Covariance, 1e-12);
    }

    [Fact]
    public void Of_Line_LeavesSecondAxisAtZero()
    {
        var density = StartOnGrid.Create(new GaussianStart(1e3, 1), new Grid(new Axis(new Interval(990, 1010), 400)));
        var moments = MomentMeasure.Of(density);
        Assert.Equal(1e3, moments.MeanX, 1e-9);
        Assert.Equal(1, moments.VarianceX, 1e-9);
        Assert.Equal(0, moments.MeanY);
        Assert.Equal(0, moments.VarianceY);
        Assert.Equal(0, moments.Covariance);
    }

    [Fact]
    public void OfSamples_FarFromZero_KeepsItsDigits()
    {
        var (x, y) = (new double[100001], new double[100001]);
        for (var i = 0; i < x.Length; i++)
        {
            // Steps of 2⁻¹⁰ are exact beside 1e6.
            x[i] = 1e6 + (i % 3 - 1) / 1024.0;
            y[i] = -1e6 + (i % 3 - 1) / 512.0;
        }

        // 33334 of the first two residues and 33333 of the third.
        var mean = -1.0 / 100001;
        var variance = 66667.0 / 100001 - mean * mean;
        var moments = MomentMeasure.OfSamples(x, y);
        Assert.Equal(mean / 1024, moments.MeanX - 1e6, 1e-10);
        Assert.Equal(1, moments.VarianceX * 1024 * 1024 / variance, 1e-9);
        Assert.Equal(1, moments.VarianceY * 512 * 512 / variance, 1e-9);
        Assert.Equal(1, moments.Covariance * 512 * 1024 / variance, 1e-9);
    }

    [Fact]
    public void OfSamples_None_IsRefused() => Assert.Throws<ArgumentException>(() => MomentMeasure.OfSamples([]));

    [Fact]
    public void Circular_DensityAcrossTheSeam_PointsToItsMiddle()
    {
        var interval = new Interval(1, 3, AxisEnds.Periodic);
        var density = StartOnGrid.Create(new GaussianStart(2.95, 0.01), new Grid(new Axis(interval, 200)));
        var circular = MomentMeasure.Circular(density);
        Assert.Equal(2.95, circular.Mean, 1e-10);
        // A wrapped normal law: e^(−σ²/2) with σ in radians.
        Assert.Equal(Math.Exp(-0.01 * Math.PI * Math.PI / 2), circular.Resultant, 1e-10);
        // The ordinary mean depends on the cut and lies elsewhere.
        Assert.True(MomentMeasure.Of(density).MeanX < 2.5);
        var uniform = new Density(density.Grid, [.. Enumerable.Repeat(0.5, 200)]);
        Assert.True(double.IsNaN(MomentMeasure.Circular(uniform).Mean));
    }

    [Fact]
    public void Circular_SecondAxisAndSamples_AgreeWithDensity()
    {
        var (x, y) = (new Interval(0, 1), new Interval(-1, 1, AxisEnds.Periodic));
        var density = StartOnGrid.Create(new GaussianStart(0.4, 0.02, 0.9, 0.04), new Grid(new Axis(x, 60), new Axis(y, 80)));
        var circular = MomentMeasure.Circular(density, alongY: true);
        Assert.Equal(0.9, circular.Mean, 1e-9);
        var samples = MomentMeasure.CircularOfSamples([0.8, 1.0, -0.9], y);
        Assert.Equal(0.96666666666, samples.Mean, 1e-2);
        Assert.InRange(samples.Resultant, 0.9, 1);
    }
}
