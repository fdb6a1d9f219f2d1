using FlowSolver.Problems;

namespace FlowSolver.Tests.Problems;

public sealed class TimePlanTests
{
    [Fact]
    public void Even_IntervalIsAMultipleOfTheStep_KeepsTheStepExactly()
    {
        var plan = TimePlan.Even(0.02, 3, 31);
        Assert.Equal(31, plan.ReportTimes.Count);
        Assert.Equal(3.0, plan.ReportTimes[^1]);
        Assert.True(plan.IsUniform);
        Assert.Equal(150, plan.TotalSteps);
        Assert.Equal(5, plan.StepsBefore(7));
        Assert.Equal(0.02, plan.StepLengthBefore(7));
    }

    [Fact]
    public void Constructor_TimesOffTheStep_ShortensStepsToFit()
    {
        var plan = new TimePlan(0.3, [0.5, 1.1]);
        Assert.Equal([0, 0.5, 1.1], plan.ReportTimes);
        Assert.Equal(2, plan.StepsBefore(1));
        Assert.Equal(0.25, plan.StepLengthBefore(1));
        Assert.Equal(2, plan.StepsBefore(2));
        Assert.Equal(0.3, plan.StepLengthBefore(2));
        Assert.False(plan.IsUniform);
    }

    [Theory]
    [InlineData(0.0, new[] { 1.0 }, "above 0")]
    [InlineData(0.1, new double[0], "at least one time")]
    [InlineData(0.1, new[] { 1.0, 1.0 }, "not increasing at 1")]
    [InlineData(0.1, new[] { 0.0, double.NaN }, "not a number")]
    [InlineData(0.1, new[] { -1.0 }, "not below 0")]
    public void Constructor_BadTimes_SaysWhich(double step, double[] times, string fragment)
        => Assert.Contains(fragment, Assert.ThrowsAny<ArgumentException>(() => new TimePlan(step, times)).Message, StringComparison.Ordinal);

    [Theory]
    [InlineData(2.3, AxisEnds.Reflecting, 1.7)]
    [InlineData(-2.3, AxisEnds.Reflecting, -1.7)]
    [InlineData(6.5, AxisEnds.Reflecting, -1.5)]
    [InlineData(2.3, AxisEnds.Periodic, -1.7)]
    [InlineData(-9.0, AxisEnds.Periodic, -1.0)]
    [InlineData(2.0, AxisEnds.Reflecting, 2.0)]
    public void Fold_OutsidePoint_ReflectsOrWraps(double position, AxisEnds ends, double expected)
        => Assert.Equal(expected, new Interval(-2, 2, ends).Fold(position), 12);
}
