using FlowSolver.Foundation;
using FlowSolver.Grids;

namespace FlowSolver.Reporting;

/// <summary>A 2-D transport map to be drawn as arrows over the density that it starts from.</summary>
/// <param name="Title">What the map carries to what, such as <c>exact flow, t = 0 to t = 0.5</c>.</param>
/// <param name="Method">The flow method whose densities it joins.</param>
/// <param name="FromTime">Time of the density that is carried.</param>
/// <param name="ToTime">Time of the density that it is carried to.</param>
/// <param name="From">The density that is carried.</param>
/// <param name="DisplacementX">x part of S(x) − x at the cell centres, x fastest, in units of length.</param>
/// <param name="DisplacementY">y part of the same.</param>
public sealed record TransportPicture(
    string Title, string Method, double FromTime, double ToTime, Density From, double[] DisplacementX, double[] DisplacementY)
{
    /// <summary>x part of S(x) − x at the cell centres, x fastest.</summary>
    public double[] DisplacementX { get; } = Checked(From, DisplacementX);

    /// <summary>y part of S(x) − x at the cell centres, x fastest.</summary>
    public double[] DisplacementY { get; } = Checked(From, DisplacementY);

    private static double[] Checked(Density from, double[] values)
    {
        ArgumentNullException.ThrowIfNull(from);
        ArgumentNullException.ThrowIfNull(values);
        Require.That(from.Grid.Dimension == 2, "The transport map was one-dimensional; arrows are drawn in two dimensions only.");
        Require.Length(values.Length, from.Grid.CellCount, "number of displacements");
        return values;
    }
}
