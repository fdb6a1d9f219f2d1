using System.Runtime.CompilerServices;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using System.Runtime.Intrinsics.X86;

namespace FlowSolver.Foundation;

/// <summary>
/// Turns eight rows into one row of vectors and back, so that a recurrence along the rows runs on eight rows at once.
/// </summary>
internal static class LineInterleave
{
    /// <summary>Rows taken together.</summary>
    public const int Lanes = 8;

    /// <summary>target[i·8 + k] ← source[row k, column i] for the first <paramref name="length"/> columns.</summary>
    /// <param name="source">First cell of row 0.</param>
    /// <param name="stride">Distance between rows.</param>
    /// <param name="rows">Number of rows that exist, 1 to 8; lanes beyond repeat the last row.</param>
    /// <param name="length">Columns; the source must be readable up to the next multiple of 8.</param>
    /// <param name="target">Length at least <paramref name="length"/> rounded up to a multiple of 8, times 8.</param>
    public static void Gather(ref double source, int stride, int rows, int length, ref double target)
    {
        for (var i = 0; i < length; i += Lanes)
        {
            ref var block = ref Unsafe.Add(ref source, i);
            ref var into = ref Unsafe.Add(ref target, i * Lanes);
            if (rows == Lanes && Avx512F.IsSupported)
            {
                Transpose(ref block, stride, ref into, Lanes);
                continue;
            }

            for (var k = 0; k < Lanes; k++)
            {
                ref var row = ref Unsafe.Add(ref block, (nint)Math.Min(k, rows - 1) * stride);
                for (var c = 0; c < Lanes; c++)
                    Unsafe.Add(ref into, c * Lanes + k) = Unsafe.Add(ref row, c);
            }
        }
    }

    /// <summary>The way back; writes only the rows that exist, and whole groups of 8 columns.</summary>
    public static void Scatter(ref double source, int length, ref double target, int stride, int rows)
    {
        for (var i = 0; i < length; i += Lanes)
        {
            ref var block = ref Unsafe.Add(ref source, i * Lanes);
            ref var into = ref Unsafe.Add(ref target, i);
            if (rows == Lanes && Avx512F.IsSupported)
            {
                Transpose(ref block, Lanes, ref into, stride);
                continue;
            }

            for (var k = 0; k < rows; k++)
            {
                ref var row = ref Unsafe.Add(ref into, (nint)k * stride);
                for (var c = 0; c < Lanes; c++)
                    Unsafe.Add(ref row, c) = Unsafe.Add(ref block, c * Lanes + k);
            }
        }
    }

    /// <summary>The vector at element <paramref name="index"/>.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static Vector512<double> Load(ref double origin, nint index) => Vector512.LoadUnsafe(ref origin, (nuint)index);

    /// <summary>The first element of an array, for loops whose bounds have been checked.</summary>
    [MethodImpl(MethodImplOptions.AggressiveInlining)]
    public static ref double First(double[] array) => ref MemoryMarshal.GetArrayDataReference(array);

    private static void Transpose(ref double source, int sourceStride, ref double target, int targetStride)
    {
        var r0 = Load(ref source, 0);
        var r1 = Load(ref source, sourceStride);
        var r2 = Load(ref source, (nint)2 * sourceStride);
        var r3 = Load(ref source, (nint)3 * sourceStride);
        var r4 = Load(ref source, (nint)4 * sourceStride);
        var r5 = Load(ref source, (nint)5 * sourceStride);
        var r6 = Load(ref source, (nint)6 * sourceStride);
        var r7 = Load(ref source, (nint)7 * sourceStride);
        // Pairs within 128-bit quarters, then quarters across registers.
        var a0 = Avx512F.UnpackLow(r0, r1);
        var a1 = Avx512F.UnpackHigh(r0, r1);
        var a2 = Avx512F.UnpackLow(r2, r3);
        var a3 = Avx512F.UnpackHigh(r2, r3);
        var a4 = Avx512F.UnpackLow(r4, r5);
        var a5 = Avx512F.UnpackHigh(r4, r5);
        var a6 = Avx512F.UnpackLow(r6, r7);
        var a7 = Avx512F.UnpackHigh(r6, r7);
        var b0 = Avx512F.Shuffle4x128(a0, a2, 0x88);
        var b1 = Avx512F.Shuffle4x128(a1, a3, 0x88);
        var b2 = Avx512F.Shuffle4x128(a0, a2, 0xDD);
        var b3 = Avx512F.Shuffle4x128(a1, a3, 0xDD);
        var b4 = Avx512F.Shuffle4x128(a4, a6, 0x88);
        var b5 = Avx512F.Shuffle4x128(a5, a7, 0x88);
        var b6 = Avx512F.Shuffle4x128(a4, a6, 0xDD);
        var b7 = Avx512F.Shuffle4x128(a5, a7, 0xDD);
        Avx512F.Shuffle4x128(b0, b4, 0x88).StoreUnsafe(ref target);
        Avx512F.Shuffle4x128(b1, b5, 0x88).StoreUnsafe(ref target, (nuint)targetStride);
        Avx512F.Shuffle4x128(b2, b6, 0x88).StoreUnsafe(ref target, (nuint)(2 * targetStride));
        Avx512F.Shuffle4x128(b3, b7, 0x88).StoreUnsafe(ref target, (nuint)(3 * targetStride));
        Avx512F.Shuffle4x128(b0, b4, 0xDD).StoreUnsafe(ref target, (nuint)(4 * targetStride));
        Avx512F.Shuffle4x128(b1, b5, 0xDD).StoreUnsafe(ref target, (nuint)(5 * targetStride));
        Avx512F.Shuffle4x128(b2, b6, 0xDD).StoreUnsafe(ref target, (nuint)(6 * targetStride));
        Avx512F.Shuffle4x128(b3, b7, 0xDD).StoreUnsafe(ref target, (nuint)(7 * targetStride));
    }
}
