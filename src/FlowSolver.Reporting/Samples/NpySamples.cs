using System.Buffers.Binary;
using System.Globalization;
using System.Runtime.InteropServices;
using System.Text;
using FlowSolver.Foundation;

namespace FlowSolver.Reporting.Samples;

/// <summary>
/// Reads samples from a NumPy array file, format versions 1 to 3, float32 or float64 of either byte order, C or Fortran order
/// (the format is described in NumPy's documentation of numpy.lib.format; from memory).
/// </summary>
internal static class NpySamples
{
    private const int LongestHeader = 65536;

    private sealed record Layout(bool IsDouble, bool IsBigEndian, bool IsFortran, long Rows, int Columns, long DataStart);

    public static SampleSet Read(string path, int dimension)
    {
        using var stream = new FileStream(path, FileMode.Open, FileAccess.Read, FileShare.Read, 1 << 20, FileOptions.SequentialScan);
        var layout = ReadHeader(stream, path);
        if (layout.Columns != dimension)
            throw SamplesReader.WrongDimension(path, layout.Columns == 1 ? "one coordinate" : $"{layout.Columns} coordinates", dimension);
        if (layout.Rows == 0)
            throw SamplesReader.Fault(path, "The array had no rows; it must have at least one.");
        if (layout.Rows > SamplesReader.MostRows)
            throw SamplesReader.TooMany(path, layout.Rows);
        var size = layout.IsDouble ? 8 : 4;
        var needed = layout.DataStart + layout.Rows * layout.Columns * size;
        if (stream.Length < needed)
        {
            throw SamplesReader.Fault(path, string.Create(
                CultureInfo.InvariantCulture, $"The file ended at byte {stream.Length}; with {layout.Rows} rows it must have {needed} bytes."), "It was cut short; copy it again.");
        }

        if (stream.Length > needed)
        {
            throw SamplesReader.Fault(path, string.Create(
                CultureInfo.InvariantCulture, $"The file went on after byte {needed}, where its {layout.Rows} rows end; it must hold one array."), "Save one array a file.");
        }

        var rows = (int)layout.Rows;
        var x = new double[rows];
        var y = layout.Columns == 2 ? new double[rows] : null;
        var buffer = new byte[1 << 20];
        var values = new double[buffer.Length / size];
        var position = 0L;
        var total = layout.Rows * layout.Columns;
        while (position < total)
        {
            var count = (int)Math.Min(values.Length, total - position);
            var bytes = buffer.AsSpan(0, count * size);
            stream.ReadExactly(bytes);
            Decode(bytes, values.AsSpan(0, count), layout);
            var bad = SamplesKernels.FirstNotFinite(values.AsSpan(0, count));
            if (bad >= 0)
            {
                var index = position + bad;
                var (row, column) = layout.IsFortran ? (index % rows, index / rows) : (index / layout.Columns, index % layout.Columns);
                throw SamplesReader.NotFinite(path, column == 0 ? "x" : "y", row + 1, values[bad],
                    string.Create(CultureInfo.InvariantCulture, $" (byte {layout.DataStart + index * size})"));
            }

            Place(values.AsSpan(0, count), position, x, y, layout.IsFortran);
            position += count;
        }

        return new SampleSet(x, y, null, path);
    }

    private static void Place(ReadOnlySpan<double> values, long position, double[] x, double[]? y, bool isFortran)
    {
        if (y is null)
        {
            values.CopyTo(x.AsSpan((int)position));
        }
        else if (isFortran)
        {
            var first = (int)Math.Clamp(x.Length - position, 0, values.Length);
            values[..first].CopyTo(x.AsSpan((int)Math.Min(position, x.Length)));
            values[first..].CopyTo(y.AsSpan((int)Math.Max(0, position - x.Length)));
        }
        else
        {
            // The buffer holds whole rows: its length is even.
            var row = (int)(position / 2);
            for (var i = 0; i + 1 < values.Length; i += 2, row++)
                (x[row], y[row]) = (values[i], values[i + 1]);
        }
    }

    private static void Decode(ReadOnlySpan<byte> bytes, Span<double> values, Layout layout)
    {
        if (layout.IsDouble)
        {
            var target = MemoryMarshal.Cast<double, long>(values);
            MemoryMarshal.Cast<byte, long>(bytes).CopyTo(target);
            if (layout.IsBigEndian == BitConverter.IsLittleEndian)
                BinaryPrimitives.ReverseEndianness(target, target);
            return;
        }

        var source = MemoryMarshal.Cast<byte, int>(bytes);
        var swap = layout.IsBigEndian == BitConverter.IsLittleEndian;
        for (var i = 0; i < values.Length; i++)
            values[i] = BitConverter.Int32BitsToSingle(swap ? BinaryPrimitives.ReverseEndianness(source[i]) : source[i]);
    }

    private static Layout ReadHeader(FileStream stream, string path)
    {
        Span<byte> start = stackalloc byte[12];
        var got = stream.ReadAtLeast(start, start.Length, throwOnEndOfStream: false);
        if (got < start.Length)
            throw SamplesReader.Fault(path, string.Create(CultureInfo.InvariantCulture, $"The file ended at byte {got}, inside its header; it was cut short."), "Copy it again.");
        var version = start[6];
        if (version is < 1 or > 3)
            throw SamplesReader.Fault(path, string.Create(CultureInfo.InvariantCulture, $"The .npy format version at byte 6 was {version}; versions 1 to 3 are read."));
        var lead = version == 1 ? 10 : 12;
        long length = version == 1 ? BinaryPrimitives.ReadUInt16LittleEndian(start[8..]) : BinaryPrimitives.ReadUInt32LittleEndian(start[8..]);
        if (length > LongestHeader)
            throw SamplesReader.Fault(path, string.Create(CultureInfo.InvariantCulture, $"The header length at byte 8 was {length}; it must be at most {LongestHeader}."), "The file is damaged.");
        if (stream.Length < lead + length)
        {
            throw SamplesReader.Fault(path, string.Create(
                CultureInfo.InvariantCulture, $"The file ended at byte {stream.Length}, inside its header of {length} bytes; it was cut short."), "Copy it again.");
        }

        stream.Position = lead;
        var bytes = new byte[length];
        stream.ReadExactly(bytes);
        var header = (version == 3 ? Encoding.UTF8 : Encoding.Latin1).GetString(bytes);
        return Describe(header, lead + length, path);
    }

    private static Layout Describe(string header, long dataStart, string path)
    {
        var type = Text(Entry(header, "descr", path));
        var order = Entry(header, "fortran_order", path);
        var shape = Entry(header, "shape", path);
        if (type is not { Length: 3 } || type[0] is not ('<' or '>' or '=') || type[1] != 'f' || type[2] is not ('4' or '8'))
        {
            throw SamplesReader.Fault(path, $"The array's element type was {Shown(type ?? Entry(header, "descr", path).ToString())}; it must be float32 or float64.",
                "Save it with .astype(\"float64\").");
        }

        var isBig = type[0] == '>' || (type[0] == '=' && !BitConverter.IsLittleEndian);
        bool isFortran;
        if (order.StartsWith("True", StringComparison.Ordinal))
            isFortran = true;
        else if (order.StartsWith("False", StringComparison.Ordinal))
            isFortran = false;
        else
            throw Damaged(path, "fortran_order");
        var close = shape.IndexOf(')');
        if (shape.IsEmpty || shape[0] != '(' || close < 0)
            throw Damaged(path, "shape");
        var sizes = new List<long>();
        foreach (var range in shape[1..close].Split(','))
        {
            var part = shape[1..close][range].Trim();
            if (part.IsEmpty)
                continue;
            if (!long.TryParse(part, NumberStyles.None, CultureInfo.InvariantCulture, out var size) || size > 1L << 40)
                throw Damaged(path, "shape");
            sizes.Add(size);
        }

        if (sizes.Count is not (1 or 2) || (sizes.Count == 2 && sizes[1] is 0 or > 1000))
        {
            throw SamplesReader.Fault(path, $"The array's shape was ({string.Join(", ", sizes)}); it must be [N] or [N,d], one row a sample.",
                sizes.Count == 2 ? "Is it transposed?" : null);
        }

        return new Layout(type[2] == '8', isBig, isFortran, sizes[0], sizes.Count == 1 ? 1 : (int)sizes[1], dataStart);
    }

    /// <summary>What follows a key of the header's dictionary.</summary>
    private static ReadOnlySpan<char> Entry(string header, string key, string path)
    {
        foreach (var quote in "'\"")
        {
            var at = header.IndexOf($"{quote}{key}{quote}", StringComparison.Ordinal);
            if (at < 0)
                continue;
            var rest = header.AsSpan(at + key.Length + 2).TrimStart();
            if (!rest.IsEmpty && rest[0] == ':')
                return rest[1..].TrimStart();
        }

        throw Damaged(path, key);
    }

    private static string? Text(ReadOnlySpan<char> value)
    {
        if (value.IsEmpty || value[0] is not ('\'' or '"'))
            return null;
        var end = value[1..].IndexOf(value[0]);
        return end < 0 ? null : value.Slice(1, end).ToString();
    }

    private static string Shown(string type)
    {
        var shown = type.Length > 24 ? type[..21] + "..." : type;
        return "\"" + new string([.. shown.Select(character => char.IsControl(character) ? '?' : character)]) + "\"";
    }

    private static InputException Damaged(string path, string key)
        => SamplesReader.Fault(path, $"The .npy header has no readable {key}; the file is damaged.", "Save it again with numpy.save.");
}
