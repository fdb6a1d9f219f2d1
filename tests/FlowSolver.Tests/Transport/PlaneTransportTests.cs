using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Transport;

public sealed class PlaneTransportTests
{
    internal static Grid Square(int cells, double half = 4, AxisEnds endsX = AxisEnds.Reflecting, AxisEnds endsY = AxisEnds.Reflecting)
        => new(new Axis(new Interval(-half, half, endsX), cells), new Axis(new Interval(-half, half, endsY), cells));

    internal static Density Normal(Grid grid, double meanX, double meanY, double varianceX, double varianceY, double covariance)
        => StartOnGrid.Create(new GaussianStart(meanX, varianceX, meanY, varianceY, covariance), grid);

    [Fact]
    public void Solve_SameDensity_IsExactlyZero()
    {
        var density = Normal(Square(64), 0.3, 0.2, 0.3, 0.2, 0.1);
        var result = PlaneTransport.Solve(density, new Density(density.Grid, (double[])density.Values.Clone()), new PlaneTransportOptions(), WorkerTeam.Alone);
        Assert.Equal(TransportBracket.Exact(0), result.Bracket);
        Assert.All(result.DisplacementX, value => Assert.Equal(0, value));
    }

    [Fact]
    public void Solve_TinyShift_IsTheShift()
    {
        var grid = Square(64);
        var bracket = PlaneTransport.Between(Normal(grid, 0, 0, 0.3, 0.3, 0), Normal(grid, 1e-4, 0, 0.3, 0.3, 0), WorkerTeam.Alone);
        Assert.Equal(1e-4, bracket.Distance, 1e-10);
        Assert.InRange(bracket.High - bracket.Low, 0, 1e-8);
    }
}
