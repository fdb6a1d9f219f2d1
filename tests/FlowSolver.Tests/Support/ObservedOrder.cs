using System.Globalization;
using System.Text;

namespace FlowSolver.Tests.Support;

/// <summary>The one helper that measures orders of convergence.</summary>
public sealed class ObservedOrder
{
    private ObservedOrder(double[] sizes, double[] errors)
    {
        Sizes = sizes;
        Errors = errors;
        Pairwise = new double[sizes.Length - 1];
        for (var i = 0; i < Pairwise.Length; i++)
            Pairwise[i] = Math.Log(errors[i] / errors[i + 1]) / Math.Log(sizes[i] / sizes[i + 1]);
        double sx = 0, sy = 0, sxx = 0, sxy = 0;
        for (var i = 0; i < sizes.Length; i++)
        {
            var (x, y) = (Math.Log(sizes[i]), Math.Log(errors[i]));
            sx += x;
            sy += y;
            sxx += x * x;
            sxy += x * y;
        }

        Fitted = (sizes.Length * sxy - sx * sy) / (sizes.Length * sxx - sx * sx);
    }

    public double[] Sizes { get; }

    public double[] Errors { get; }

    public double[] Pairwise { get; }

    public double Fitted { get; }

    /// <summary>Runs <paramref name="error"/> at each size (τ or h, coarse to fine).</summary>
    public static ObservedOrder Measure(IReadOnlyList<double> sizes, Func<double, double> error)
        => new([.. sizes], [.. sizes.Select(error)]);

    /// <summary>Asserts that the finest pairwise order is within <paramref name="slack"/> of <paramref name="order"/>; shows the table when it is not.</summary>
    public void AssertFinest(double order, double slack)
        => Assert.True(Math.Abs(Pairwise[^1] - order) <= slack, $"Order {order} ± {slack} was expected.\n{this}");

    /// <summary>Asserts a least order at the finest pair.</summary>
    public void AssertAtLeast(double order)
        => Assert.True(Pairwise[^1] >= order, $"An order of at least {order} was expected.\n{this}");

    public override string ToString()
    {
        var text = new StringBuilder("size, error, order\n");
        for (var i = 0; i < Sizes.Length; i++)
            text.AppendLine(string.Create(CultureInfo.InvariantCulture, $"{Sizes[i]:g6}, {Errors[i]:g6}, {(i > 0 ? Pairwise[i - 1].ToString("f3", CultureInfo.InvariantCulture) : "")}"));
        return text.ToString();
    }
}
