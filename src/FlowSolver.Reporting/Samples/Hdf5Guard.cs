using System.Buffers.Binary;
using System.Runtime.CompilerServices;
using System.Text;

namespace FlowSolver.Reporting.Samples;

/// <summary>
/// A file opened for the HDF5 library, which trusts what it reads: in a damaged file its blocks can point back at each other. This stream ends such
/// a chase by an exception, before the stack or anybody's patience runs out.
/// </summary>
internal sealed class Hdf5Stream(string path) : Stream
{
    private readonly FileStream inner = new(path, FileMode.Open, FileAccess.Read, FileShare.Read, 1 << 16);
    private long left = -1;

    public override bool CanRead => true;

    public override bool CanSeek => true;

    public override bool CanWrite => false;

    public override long Length => inner.Length;

    public override long Position
    {
        get => inner.Position;
        set
        {
            Check();
            inner.Position = value;
        }
    }

    public override int Read(byte[] buffer, int offset, int count)
    {
        Check();
        return inner.Read(buffer, offset, count);
    }

    public override int Read(Span<byte> buffer)
    {
        Check();
        return inner.Read(buffer);
    }

    public override int ReadByte()
    {
        Check();
        return inner.ReadByte();
    }

    public override long Seek(long offset, SeekOrigin origin)
    {
        Check();
        return inner.Seek(offset, origin);
    }

    public override void Flush() { }

    public override void SetLength(long value) => throw new NotSupportedException("The file is open for reading only.");

    public override void Write(byte[] buffer, int offset, int count) => throw new NotSupportedException("The file is open for reading only.");

    protected override void Dispose(bool disposing)
    {
        if (disposing)
            inner.Dispose();
        base.Dispose(disposing);
    }

    private void Check()
    {
        RuntimeHelpers.EnsureSufficientExecutionStack();
        // Far more calls than any sound file takes: it is read once, in pieces of more than a byte.
        if (left < 0)
            left = 200_000 + 2 * inner.Length;
        if (--left == 0)
            throw new InvalidDataException("Its blocks point at each other in a circle.");
    }
}

/// <summary>
/// Looks for soft links among the names that are about to be asked for. The library follows a soft link by itself, and one that leads back to itself
/// without end and without reading, where <see cref="Hdf5Stream"/> cannot stop it. Links in a group of many members in the newest format ("dense
/// storage") are not looked at.
/// </summary>
/// <remarks>Layout after the HDF5 File Format Specification, version 3: superblock, object headers, link message, symbol table nodes (from memory).</remarks>
internal sealed class Hdf5Links
{
    private const int MostBlocks = 10000;
    private readonly Stream stream;
    private readonly HashSet<string> soft = [];
    private readonly HashSet<ulong> seen = [];

    /// <summary>Reads the links of the root group; gives up quietly on a file that it does not understand.</summary>
    public Hdf5Links(Stream stream)
    {
        this.stream = stream;
        try
        {
            var start = Bytes(0, 96);
            var version = start[8];
            if (version <= 1)
                ReadHeader(UInt64(start, version == 0 ? 64 : 68));
            else if (start[9] == 8)
                ReadHeader(UInt64(start, 36));
        }
        catch (Exception exception) when (exception is EndOfStreamException or ArgumentException or IndexOutOfRangeException or IOException)
        {
            // What is damaged here is found damaged by the library as well.
        }
    }

    /// <summary>Whether the root group has a soft or external link of this name.</summary>
    public bool IsSoft(string name) => soft.Contains(name);

    private void ReadHeader(ulong address)
    {
        if (!seen.Add(address) || seen.Count > MostBlocks)
            return;
        var start = Bytes(address, 32);
        if (start[0] == 'O' && start[1] == 'H' && start[2] == 'D' && start[3] == 'R')
        {
            var flags = start[5];
            var place = 6 + ((flags & 0x20) != 0 ? 16 : 0) + ((flags & 0x10) != 0 ? 4 : 0);
            var sizeBytes = 1 << (flags & 3);
            var size = 0UL;
            for (var i = 0; i < sizeBytes; i++)
                size |= (ulong)start[place + i] << (8 * i);
            ReadMessages(address + (ulong)(place + sizeBytes), size, isNew: true, (flags & 4) != 0);
        }
        else if (start[0] == 1)
        {
            ReadMessages(address + 16, BinaryPrimitives.ReadUInt32LittleEndian(start.AsSpan(8)), isNew: false, false);
        }
    }

    private void ReadMessages(ulong address, ulong size, bool isNew, bool hasOrder)
    {
        if (size > 1 << 20)
            return;
        var block = Bytes(address, (int)size);
        var lead = isNew ? hasOrder ? 6 : 4 : 8;
        var at = 0;
        while (at + lead <= block.Length)
        {
            var type = isNew ? block[at] : BinaryPrimitives.ReadUInt16LittleEndian(block.AsSpan(at));
            var length = BinaryPrimitives.ReadUInt16LittleEndian(block.AsSpan(at + (isNew ? 1 : 2)));
            at += lead;
            if (at + length > block.Length)
                return;
            var body = block.AsSpan(at, length);
            at += length;
            if (type == 0x06)
            {
                ReadLink(body);
            }
            else if (type == 0x11 && length >= 16)
            {
                ReadTree(UInt64(body, 0), UInt64(body, 8));
            }
            else if (type == 0x10 && length >= 16 && seen.Add(UInt64(body, 0)) && seen.Count <= MostBlocks)
            {
                // A block of the new format begins with a mark and ends with a checksum.
                var (next, nextSize) = (UInt64(body, 0), UInt64(body, 8));
                ReadMessages(isNew ? next + 4 : next, isNew ? nextSize - 8 : nextSize, isNew, hasOrder);
            }
        }
    }

    private void ReadLink(ReadOnlySpan<byte> body)
    {
        var flags = body[1];
        var at = 2;
        var type = 0;
        if ((flags & 8) != 0)
            type = body[at++];
        if ((flags & 4) != 0)
            at += 8;
        if ((flags & 16) != 0)
            at++;
        var length = 0UL;
        for (var i = 0; i < 1 << (flags & 3); i++)
            length |= (ulong)body[at++] << (8 * i);
        if (type != 0 && length <= 1024)
            soft.Add(Encoding.UTF8.GetString(body.Slice(at, (int)length)));
    }

    private void ReadTree(ulong tree, ulong heap)
    {
        if (!seen.Add(tree) || seen.Count > MostBlocks)
            return;
        var start = Bytes(tree, 24);
        if (start[0] == 'T')
        {
            var count = BinaryPrimitives.ReadUInt16LittleEndian(start.AsSpan(6));
            var children = Bytes(tree + 24, 16 * count + 8);
            for (var i = 0; i < count; i++)
                ReadTree(UInt64(children, 8 + 16 * i), heap);
        }
        else if (start[0] == 'S')
        {
            var names = UInt64(Bytes(heap, 32), 24);
            var count = BinaryPrimitives.ReadUInt16LittleEndian(start.AsSpan(6));
            var entries = Bytes(tree + 8, 40 * count);
            for (var i = 0; i < count; i++)
            {
                if (BinaryPrimitives.ReadUInt32LittleEndian(entries.AsSpan(40 * i + 16)) == 2)
                    soft.Add(NameAt(names + UInt64(entries, 40 * i)));
            }
        }
    }

    private string NameAt(ulong address)
    {
        var bytes = new byte[64];
        stream.Position = checked((long)address);
        var got = stream.ReadAtLeast(bytes, bytes.Length, throwOnEndOfStream: false);
        var text = bytes.AsSpan(0, got);
        var end = text.IndexOf((byte)0);
        return Encoding.UTF8.GetString(end < 0 ? text : text[..end]);
    }

    private byte[] Bytes(ulong address, int count)
    {
        if (address > (ulong)stream.Length)
            throw new EndOfStreamException();
        stream.Position = (long)address;
        var bytes = new byte[count];
        // A short file leaves zeros: this is a look, not a check.
        stream.ReadAtLeast(bytes, count, throwOnEndOfStream: false);
        return bytes;
    }

    private static ulong UInt64(ReadOnlySpan<byte> bytes, int at) => BinaryPrimitives.ReadUInt64LittleEndian(bytes[at..]);
}
