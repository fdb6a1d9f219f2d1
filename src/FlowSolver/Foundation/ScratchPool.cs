namespace FlowSolver.Foundation;

/// <summary>Equal work arrays, zero at first, that the blocks of a <see cref="WorkerTeam"/> borrow while they run. Safe for use from several threads at once.</summary>
/// <param name="slots">Number of arrays: the most threads that can be at work.</param>
/// <param name="length">Length of each.</param>
internal sealed class ScratchPool(int slots, int length)
{
    private readonly double[][] arrays = Allocate(slots, length);
    private readonly int[] taken = new int[slots];

    /// <summary>Borrows an array; its content is whatever its last user left.</summary>
    public double[] Rent(out int slot)
    {
        while (true)
        {
            for (slot = 0; slot < taken.Length; slot++)
            {
                if (Interlocked.CompareExchange(ref taken[slot], 1, 0) == 0)
                    return arrays[slot];
            }

            Thread.SpinWait(20);
        }
    }

    /// <summary>Gives an array back.</summary>
    public void Return(int slot) => Volatile.Write(ref taken[slot], 0);

    private static double[][] Allocate(int slots, int length)
    {
        var arrays = new double[slots][];
        for (var i = 0; i < slots; i++)
            arrays[i] = new double[length];
        return arrays;
    }
}
