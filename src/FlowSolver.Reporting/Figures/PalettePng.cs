using System.Buffers.Binary;
using System.IO.Compression;
using FlowSolver.Foundation;

namespace FlowSolver.Reporting.Figures;

/// <summary>
/// Packs a picture of at most 256 colours as PNG (ISO/IEC 15948): one byte a pixel and deflate, needing no native library. The plotting library's own
/// encoder does not compress, which makes a map of 512² cells a megabyte.
/// </summary>
internal static class PalettePng
{
    private static readonly uint[] CrcTable = MakeCrcTable();

    /// <summary>Encodes a picture.</summary>
    /// <param name="indices">Colour numbers, row by row from the top; length width × height.</param>
    /// <param name="width">Pixels in a row.</param>
    /// <param name="height">Rows.</param>
    /// <param name="palette">Red, green and blue of each colour; at most 256.</param>
    public static byte[] Encode(ReadOnlySpan<byte> indices, int width, int height, IReadOnlyList<(byte R, byte G, byte B)> palette)
    {
        Require.Length(indices.Length, width * height);
        using var file = new MemoryStream();
        file.Write([0x89, (byte)'P', (byte)'N', (byte)'G', 0x0D, 0x0A, 0x1A, 0x0A]);
        Span<byte> header = stackalloc byte[13];
        BinaryPrimitives.WriteInt32BigEndian(header, width);
        BinaryPrimitives.WriteInt32BigEndian(header[4..], height);
        header[8] = 8; // bits a pixel
        header[9] = 3; // colours from a palette
        header[10..].Clear();
        Chunk(file, "IHDR"u8, header);
        var colors = new byte[3 * palette.Count];
        for (var i = 0; i < palette.Count; i++)
            (colors[3 * i], colors[3 * i + 1], colors[3 * i + 2]) = palette[i];
        Chunk(file, "PLTE"u8, colors);
        using var packed = new MemoryStream();
        using (var deflate = new ZLibStream(packed, CompressionLevel.Optimal, leaveOpen: true))
        {
            for (var row = 0; row < height; row++)
            {
                deflate.WriteByte(0); // no row filter: neighbours in a palette are not differences of brightness
                deflate.Write(indices.Slice(row * width, width));
            }
        }

        Chunk(file, "IDAT"u8, packed.GetBuffer().AsSpan(0, (int)packed.Length));
        Chunk(file, "IEND"u8, []);
        return file.ToArray();
    }

    private static void Chunk(MemoryStream file, ReadOnlySpan<byte> type, ReadOnlySpan<byte> data)
    {
        Span<byte> number = stackalloc byte[4];
        BinaryPrimitives.WriteInt32BigEndian(number, data.Length);
        file.Write(number);
        file.Write(type);
        file.Write(data);
        BinaryPrimitives.WriteUInt32BigEndian(number, ~Crc(Crc(uint.MaxValue, type), data));
        file.Write(number);
    }

    // ISO 3309 cyclic redundancy check, as in annex D of the PNG specification.
    private static uint Crc(uint crc, ReadOnlySpan<byte> data)
    {
        foreach (var value in data)
            crc = CrcTable[(crc ^ value) & 0xFF] ^ (crc >> 8);
        return crc;
    }

    private static uint[] MakeCrcTable()
    {
        var table = new uint[256];
        for (var n = 0u; n < 256; n++)
        {
            var c = n;
            for (var k = 0; k < 8; k++)
                c = (c & 1) != 0 ? 0xEDB88320 ^ (c >> 1) : c >> 1;
            table[n] = c;
        }

        return table;
    }
}
