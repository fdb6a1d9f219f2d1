using System.Globalization;
using CsvHelper;
using FlowSolver.Foundation;

namespace FlowSolver.Reporting.Samples;

/// <summary>Reads samples from CSV with a header.</summary>
internal static class CsvSamples
{
    // No row of three numbers is longer: a file without line ends is refused before it fills the memory.
    private const int LongestRow = 65536;

    private static readonly string[] Known = ["x", "y", "time"];

    public static SampleSet Read(string path, int dimension)
    {
        var options = new CsvReaderOptions
        {
            Separator = ',',
            TrimWhitespace = true,
            TrackLineNumbers = true,
            MaxRecordSize = LongestRow,
            MalformedData = CsvMalformedDataHandling.Throw,
            AllowLineBreaksInQuotes = false,
        };
        try
        {
            using var reader = CsvReader.FromFile(path, options);
            return Read(reader, path, dimension);
        }
        catch (CsvFormatException exception)
        {
            throw SamplesReader.Fault(path, $"The text is not CSV near byte {exception.ByteOffset}: {SamplesReader.FirstLine(exception.Message)}",
                line: exception.LineNumber > 0 ? exception.LineNumber : null);
        }
    }

    private static SampleSet Read(CsvReader reader, string path, int dimension)
    {
        var headers = reader.Headers;
        var columns = Columns(headers, path, dimension);
        var estimate = (int)Math.Clamp(new FileInfo(path).Length / (10 * headers.Count), 16, 1 << 24);
        var x = new double[estimate];
        var y = columns[1] < 0 ? null : new double[estimate];
        var time = columns[2] < 0 ? null : new double[estimate];
        var count = 0;
        while (reader.Read())
        {
            if (reader.FieldCount != headers.Count)
            {
                throw SamplesReader.Fault(path, string.Create(
                    CultureInfo.InvariantCulture, $"Row {reader.RowNumber} had {reader.FieldCount} value{(reader.FieldCount == 1 ? "" : "s")}; it must have {headers.Count}, as the header has."),
                    line: reader.LineNumber);
            }

            if (count == x.Length)
            {
                if (count == SamplesReader.MostRows)
                    throw SamplesReader.TooMany(path, count + 1L);
                var larger = (int)Math.Min(2L * count, SamplesReader.MostRows);
                Array.Resize(ref x, larger);
                if (y is not null)
                    Array.Resize(ref y, larger);
                if (time is not null)
                    Array.Resize(ref time, larger);
            }

            x[count] = Number(reader, columns[0], "x", path);
            if (y is not null)
                y[count] = Number(reader, columns[1], "y", path);
            if (time is not null)
                time[count] = Number(reader, columns[2], "time", path);
            count++;
        }

        if (count == 0)
            throw SamplesReader.Fault(path, "The file held a header and no rows; it must hold at least one sample.", line: 1);
        Array.Resize(ref x, count);
        if (y is not null)
            Array.Resize(ref y, count);
        if (time is not null)
            Array.Resize(ref time, count);
        return new SampleSet(x, y, time, path);
    }

    private static double Number(CsvReader reader, int column, string name, string path)
    {
        if (reader.TryParse<double>(column, out var value) && double.IsFinite(value))
            return value;
        var found = reader.GetSpan(column);
        if (found.IsEmpty)
        {
            throw SamplesReader.Fault(path, string.Create(
                CultureInfo.InvariantCulture, $"{name} was empty in row {reader.RowNumber}; it must be a finite number."), line: reader.LineNumber);
        }

        if (double.TryParse(found, NumberStyles.Float, CultureInfo.InvariantCulture, out value) && !double.IsFinite(value))
            throw SamplesReader.NotFinite(path, name, reader.RowNumber, value, "", reader.LineNumber);
        throw SamplesReader.Fault(path, string.Create(
            CultureInfo.InvariantCulture, $"{name} was {SamplesReader.Show(found)} in row {reader.RowNumber}; it must be a finite number such as -0.25."),
            line: reader.LineNumber);
    }

    /// <summary>The columns of x, y and time; −1 for one that is not there.</summary>
    private static int[] Columns(IReadOnlyList<string> headers, string path, int dimension)
    {
        var columns = new[] { -1, -1, -1 };
        for (var i = 0; i < headers.Count; i++)
        {
            var name = headers[i].Trim().ToLowerInvariant();
            var known = Array.IndexOf(Known, name);
            if (known < 0)
                throw Unknown(headers, i, path);
            if (columns[known] >= 0)
                throw SamplesReader.Fault(path, $"The header named the column {name} twice; it must stand once.", line: 1);
            columns[known] = i;
        }

        if (columns[0] < 0)
            throw SamplesReader.Fault(path, "The header had no column x; it must be x[,y][,time].", line: 1);
        if (columns[1] < 0 == (dimension == 2))
            throw SamplesReader.WrongDimension(path, dimension == 2 ? "no column y" : "a column y", dimension);
        return columns;
    }

    private static InputException Unknown(IReadOnlyList<string> headers, int column, string path)
    {
        var found = headers[column].Trim();
        var shown = found.Length > 30 ? found[..27] + "..." : found;
        shown = new string([.. shown.Select(character => char.IsControl(character) ? '?' : character)]);
        if (found.Contains(';', StringComparison.Ordinal) || found.Contains('\t', StringComparison.Ordinal))
            return SamplesReader.Fault(path, $"The header was \"{shown}\"; its columns must be separated by commas.", "Decimals are written with a point.", 1);
        if (double.TryParse(found, NumberStyles.Float, CultureInfo.InvariantCulture, out _))
            return SamplesReader.Fault(path, $"The first line held the number {shown}; it must be a header x[,y][,time].", "Add the line with the column names.", 1);
        var nearest = NearestName.Among(found, Known);
        return SamplesReader.Fault(path, $"The header named the column \"{shown}\"; its columns must be x[,y][,time].",
            nearest is null ? "Remove or rename the column." : $"Did you mean {nearest}?", 1);
    }
}
