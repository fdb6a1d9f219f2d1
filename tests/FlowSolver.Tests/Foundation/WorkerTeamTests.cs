using FlowSolver.Foundation;

namespace FlowSolver.Tests.Foundation;

public sealed class WorkerTeamTests
{
    // Tried: taking the block index by a plain increment instead of an interlocked one; blocks then run twice or never.
    [Theory]
    [InlineData(1)]
    [InlineData(2)]
    [InlineData(5)]
    public void Run_ManyTimes_RunsEachBlockOnce(int size)
    {
        using var team = new WorkerTeam(size);
        var counts = new int[1000];
        for (var round = 0; round < 200; round++)
            team.Run(counts.Length, block => Interlocked.Increment(ref counts[block]));
        Assert.All(counts, count => Assert.Equal(200, count));
    }

    [Fact]
    public void Run_BlockThrows_RethrowsAndServesOn()
    {
        using var team = new WorkerTeam(3);
        var thrown = Assert.Throws<InvalidOperationException>(() => team.Run(64, block =>
        {
            if (block == 17)
                throw new InvalidOperationException("block 17");
        }));
        Assert.Equal("block 17", thrown.Message);
        var sum = 0;
        team.Run(10, block => Interlocked.Add(ref sum, block));
        Assert.Equal(45, sum);
    }

    [Fact]
    public void Run_FromInsideABlock_RunsOnTheSpot()
    {
        using var team = new WorkerTeam(2);
        var sum = 0;
        team.Run(4, _ => team.Run(5, inner => Interlocked.Add(ref sum, inner)));
        Assert.Equal(40, sum);
    }

    [Fact]
    public void Run_WithAKeptDelegate_AllocatesNothing()
    {
        using var team = new WorkerTeam(2);
        var counts = new int[8];
        Action<int> job = block => counts[block]++;
        team.Run(8, job);
        var before = GC.GetAllocatedBytesForCurrentThread();
        for (var k = 0; k < 100; k++)
            team.Run(8, job);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }
}
