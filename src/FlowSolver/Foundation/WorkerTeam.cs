using System.Runtime.ExceptionServices;

namespace FlowSolver.Foundation;

/// <summary>
/// A fixed team of threads that share out numbered blocks of work without allocating.
/// </summary>
/// <remarks>
/// Results must not depend on the size of the team: the caller cuts the work into blocks whose bounds depend on the problem only, lets each
/// block write to its own place, and combines partial sums in block order. Which thread takes which block is not fixed.
/// A team serves one caller at a time; a call from inside a block runs its blocks on the calling thread.
/// </remarks>
public sealed class WorkerTeam : IDisposable
{
    private const int SpinsBeforeSleep = 200;
    private const int Running = 0;
    private const int Finished = 1;
    private const int Awaited = 2;
    private readonly Thread[] threads;
    private readonly SemaphoreSlim wake = new(0);
    private readonly AutoResetEvent finished = new(false);
    private readonly Lock gate = new();
    private Action<int>? job;
    private int blockCount;
    private int nextBlock;
    private int helpersAtWork;
    private int phase;
    private ExceptionDispatchInfo? failure;
    private volatile bool stopping;
    [ThreadStatic] private static bool insideBlock;

    /// <summary>Starts a team.</summary>
    /// <param name="size">Number of threads that work at once, the caller's included; at least 1.</param>
    public WorkerTeam(int size)
    {
        Size = Require.AtLeast(size, 1);
        threads = new Thread[size - 1];
        for (var i = 0; i < threads.Length; i++)
        {
            threads[i] = new Thread(Work) { IsBackground = true, Name = "FlowSolver worker" };
            threads[i].Start();
        }
    }

    /// <summary>A team of the calling thread alone; disposing it does nothing.</summary>
    public static WorkerTeam Alone { get; } = new(1);

    /// <summary>Number of threads that work at once, the caller's included.</summary>
    public int Size { get; }

    /// <summary>
    /// Runs <paramref name="blockJob"/> once for each block index 0 … <paramref name="blocks"/> − 1 and returns when all are done.
    /// Keep the delegate in a field: then a call allocates nothing.
    /// </summary>
    /// <exception cref="Exception">The first exception that a block threw, rethrown here after all threads have stopped.</exception>
    public void Run(int blocks, Action<int> blockJob)
    {
        ArgumentNullException.ThrowIfNull(blockJob);
        if (blocks <= 0)
            return;
        if (threads.Length == 0 || blocks == 1 || insideBlock)
        {
            for (var i = 0; i < blocks; i++)
                blockJob(i);
            return;
        }

        lock (gate)
        {
            ObjectDisposedException.ThrowIf(stopping, this);
            var helpers = Math.Min(threads.Length, blocks - 1);
            job = blockJob;
            blockCount = blocks;
            nextBlock = 0;
            failure = null;
            helpersAtWork = helpers;
            Volatile.Write(ref phase, Running);
            wake.Release(helpers);
            TakeBlocks();
            AwaitHelpers();
            job = null;
            failure?.Throw();
        }
    }

    /// <summary>Ends the team's threads.</summary>
    public void Dispose()
    {
        if (threads.Length == 0 || stopping)
            return;
        lock (gate)
        {
            stopping = true;
            wake.Release(threads.Length);
        }

        foreach (var thread in threads)
            thread.Join();
        wake.Dispose();
        finished.Dispose();
    }

    private void Work()
    {
        while (true)
        {
            wake.Wait();
            if (stopping)
                return;
            TakeBlocks();
            if (Interlocked.Decrement(ref helpersAtWork) == 0 && Interlocked.Exchange(ref phase, Finished) == Awaited)
                finished.Set();
        }
    }

    // A plain event behind a short spin: the slim kinds allocate when they are first waited on.
    private void AwaitHelpers()
    {
        for (var spin = 0; spin < SpinsBeforeSleep; spin++)
        {
            if (Volatile.Read(ref phase) == Finished)
                return;
            Thread.SpinWait(20);
        }

        if (Interlocked.CompareExchange(ref phase, Awaited, Running) == Running)
            finished.WaitOne();
    }

    private void TakeBlocks()
    {
        insideBlock = true;
        try
        {
            int block;
            while ((block = Interlocked.Increment(ref nextBlock) - 1) < blockCount)
                job!(block);
        }
        catch (Exception exception)
        {
            Interlocked.CompareExchange(ref failure, ExceptionDispatchInfo.Capture(exception), null);
            Volatile.Write(ref nextBlock, blockCount);
        }
        finally
        {
            insideBlock = false;
        }
    }
}
