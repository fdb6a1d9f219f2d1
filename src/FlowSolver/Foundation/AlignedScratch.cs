using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;

namespace FlowSolver.Foundation;

/// <summary>
/// Stack buffers that begin on a cache line. A 64-byte vector that lies across two lines costs twice as much to read or write, and neither arrays nor
/// stack buffers begin on a line by themselves.
/// </summary>
public static class AlignedScratch
{
    /// <summary>Elements to ask for beyond those needed, so that an aligned part can be found.</summary>
    public const int Slack = 8;

    /// <summary>The aligned part of a buffer on the stack.</summary>
    /// <param name="buffer">From <c>stackalloc</c>, with <see cref="Slack"/> elements to spare. Memory that the collector may move would not stay aligned.</param>
    /// <param name="length">Length of the part.</param>
    public static unsafe Span<T> Of<T>(Span<T> buffer, int length)
        where T : unmanaged
    {
        var address = (nuint)Unsafe.AsPointer(ref MemoryMarshal.GetReference(buffer));
        return buffer.Slice((int)((0 - address) % 64) / sizeof(T), length);
    }
}
