using System.Globalization;
using System.Text;
using FlowSolver.Foundation;

namespace FlowSolver.Reporting.Samples;

/// <summary>
/// Reads samples from a file, at most once through it: CSV with a header <c>x[,y][,time]</c>, <c>.npy</c> (float32 or float64, shape [N] or [N,d]),
/// or HDF5 (datasets <c>x</c>[, <c>y</c>][, <c>time</c>], or one dataset <c>samples</c> of shape [N] or [N,d]).
/// </summary>
public static class SamplesReader
{
    /// <summary>Most rows of a file: they are held in memory.</summary>
    public const int MostRows = 200_000_000;

    private static readonly byte[] NpyMark = [0x93, (byte)'N', (byte)'U', (byte)'M', (byte)'P', (byte)'Y'];
    private static readonly byte[] Hdf5Mark = [0x89, (byte)'H', (byte)'D', (byte)'F', 0x0D, 0x0A, 0x1A, 0x0A];

    /// <summary>Reads a file.</summary>
    /// <param name="path">The file.</param>
    /// <param name="dimension">1 or 2: the dimension that the samples must have.</param>
    /// <param name="leastRows">Least number of rows that makes sense to the caller.</param>
    /// <exception cref="InputException">The file cannot be used; the sentence names the row or the byte.</exception>
    public static SampleSet Read(string path, int dimension, int leastRows = 1)
    {
        ArgumentNullException.ThrowIfNull(path);
        Require.That(dimension is 1 or 2, $"The dimension was {dimension}; it must be 1 or 2.");
        try
        {
            if (Directory.Exists(path))
                throw Fault(path, "The file of samples was a directory; it must be a CSV, .npy or HDF5 file.");
            if (!File.Exists(path))
                throw Fault(path, "The file of samples does not exist.", "Check the name; a case file names its start samples relative to itself.");
            var set = Dispatch(path, dimension);
            if (set.Count < leastRows)
            {
                throw Fault(path, string.Create(
                    CultureInfo.InvariantCulture, $"The file held {set.Count} row{(set.Count == 1 ? "" : "s")} of samples; it must hold at least {leastRows}."));
            }

            return set;
        }
        catch (Exception exception) when (exception is IOException or UnauthorizedAccessException or NotSupportedException)
        {
            throw Fault(path, $"The file of samples could not be read: {FirstLine(exception.Message)}");
        }
    }

    private static SampleSet Dispatch(string path, int dimension)
    {
        var start = new byte[4096];
        int length;
        using (var stream = File.OpenRead(path))
            length = stream.ReadAtLeast(start, start.Length, throwOnEndOfStream: false);
        var head = start.AsSpan(0, length);
        if (length == 0)
            throw Fault(path, "The file of samples was empty; it must hold at least one sample.");
        if (head.StartsWith(NpyMark))
            return NpySamples.Read(path, dimension);
        if (head.StartsWith(Hdf5Mark))
            return Hdf5Samples.Read(path, dimension);
        var ending = Path.GetExtension(path).ToLowerInvariant();
        if (ending == ".npy")
            throw Fault(path, "The file is called .npy but byte 0 does not begin the mark \\x93NUMPY; it must be a NumPy array file.", "Save it with numpy.save.");
        if (ending is ".h5" or ".hdf5")
            throw Fault(path, "The file is called HDF5 but byte 0 does not begin the mark \\x89HDF; it must be an HDF5 file.");
        var zero = head.IndexOf((byte)0);
        if (zero >= 0)
        {
            throw Fault(path, string.Create(
                CultureInfo.InvariantCulture, $"The file is neither text nor .npy nor HDF5: byte {zero} was 0."), "Save the samples as CSV, .npy or HDF5.");
        }

        return CsvSamples.Read(path, dimension);
    }

    internal static InputException Fault(string path, string message, string? remedy = null, long? line = null)
        => new(new InputFault(message, remedy, path, line is { } number and <= int.MaxValue ? (int)number : null));

    internal static InputException NotFinite(string path, string column, long row, double found, string place, long? line = null)
        => Fault(path, string.Create(
            CultureInfo.InvariantCulture, $"{column} was {(double.IsNaN(found) ? "not a number" : found > 0 ? "infinite" : "minus infinity")} in row {row}{place}; it must be finite."),
            "Find out where it comes from; a row that is left out must be left out on purpose.", line);

    internal static InputException TooMany(string path, long rows) => Fault(path, string.Create(
        CultureInfo.InvariantCulture, $"The file held {rows} rows; at most {MostRows} are read."), "Thin it out, or split it by time.");

    internal static InputException WrongDimension(string path, string found, int dimension) => Fault(path,
        $"The samples have {found} and the case has {(dimension == 1 ? "one axis" : "two axes")}; they must agree.",
        dimension == 1 ? "Give a y axis to the case, or samples of x alone." : "Give both coordinates, or a case without a y axis.");

    internal static string FirstLine(string message)
    {
        var line = message.AsSpan();
        var end = line.IndexOfAny('\r', '\n');
        var text = (end >= 0 ? line[..end] : line).Trim().ToString();
        if (text.Length > 200)
            text = text[..197] + "...";
        return text.EndsWith('.') ? text : text + ".";
    }

    /// <summary>Bytes for a message: as text where they are text, otherwise as hexadecimal numbers.</summary>
    internal static string Show(ReadOnlySpan<byte> bytes)
    {
        var part = bytes[..Math.Min(bytes.Length, 30)];
        var isText = true;
        foreach (var value in part)
            isText &= value is >= 0x20 and not 0x7F;
        var text = isText ? Encoding.UTF8.GetString(part) : Convert.ToHexString(part[..Math.Min(part.Length, 12)]);
        return (isText ? "\"" : "the bytes ") + text + (bytes.Length > part.Length ? "..." : "") + (isText ? "\"" : "");
    }
}
