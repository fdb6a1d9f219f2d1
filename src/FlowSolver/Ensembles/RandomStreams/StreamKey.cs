using System.Runtime.InteropServices;

namespace FlowSolver.Ensembles.RandomStreams;

/// <summary>
/// Names an endless row of random 64-bit words, numbered from 0: word i depends on the key and on i alone, never on what was asked for before.
/// </summary>
/// <remarks>
/// Word i belongs to batch i/16. Within a batch words 0 … 7 are the first halves and words 8 … 15 the second halves of the outputs of counters
/// 8·(i/16) … + 7, so that vectors of eight are stored as they come. The counter's low 64 bits are that number, its high 64 bits
/// <see cref="Step"/> (below) and <see cref="Purpose"/>; the generator's key is <see cref="Seed"/>.
/// </remarks>
/// <param name="Seed">The user's seed.</param>
/// <param name="Purpose">What the numbers are for: different purposes are independent.</param>
/// <param name="Step">Step of a run, or repetition of a simulation: different steps are independent.</param>
public readonly record struct StreamKey(ulong Seed, uint Purpose, uint Step = 0)
{
    internal ulong HighHalf => Step | ((ulong)Purpose << 32);

    /// <summary>Writes words <paramref name="offset"/> … of the row.</summary>
    public void FillBits(ulong offset, Span<ulong> destination)
    {
        Span<ulong> batch = stackalloc ulong[Philox.BatchWords];
        while (destination.Length > 0)
        {
            var skipped = (int)(offset % Philox.BatchWords);
            var count = destination.Length - destination.Length % Philox.BatchWords;
            if (skipped == 0 && count > 0)
            {
                Philox.Fill(offset / 2, HighHalf, Seed, ref MemoryMarshal.GetReference(destination), count);
            }
            else
            {
                Philox.Fill((offset - (ulong)skipped) / 2, HighHalf, Seed, ref MemoryMarshal.GetReference(batch), Philox.BatchWords);
                count = Math.Min(destination.Length, Philox.BatchWords - skipped);
                batch.Slice(skipped, count).CopyTo(destination);
            }

            destination = destination[count..];
            offset += (ulong)count;
        }
    }
}
