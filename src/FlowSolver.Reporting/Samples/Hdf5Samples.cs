using System.Buffers.Binary;
using System.Globalization;
using FlowSolver.Foundation;
using PureHDF;

namespace FlowSolver.Reporting.Samples;

/// <summary>Reads samples from HDF5: datasets x[, y][, time] in the root group, or one dataset <c>samples</c> of shape [N] or [N,d].</summary>
internal static class Hdf5Samples
{
    public static SampleSet Read(string path, int dimension)
    {
        CheckLength(path);
        try
        {
            using var stream = new Hdf5Stream(path);
            var links = new Hdf5Links(stream);
            foreach (var name in new[] { "samples", "x", "y", "time" })
            {
                if (links.IsSoft(name))
                    throw SamplesReader.Fault(path, $"{name} was a link to another place; it must be a dataset of the root group itself.", "Copy the data instead of linking them.");
            }

            // The library takes the position that it finds for the beginning of the file.
            stream.Position = 0;
            using var file = H5File.Open(stream, leaveOpen: true);
            if (file.LinkExists("samples"))
                return ReadOne(Dataset(file, "samples", path), path, dimension);
            if (!file.LinkExists("x"))
                throw SamplesReader.Fault(path, "The file had no dataset x and none called samples; it must have x[, y][, time] or samples.");
            if (file.LinkExists("y") != (dimension == 2))
                throw SamplesReader.WrongDimension(path, dimension == 2 ? "no dataset y" : "a dataset y", dimension);
            var x = Column(file, "x", path, null);
            var y = dimension == 2 ? Column(file, "y", path, x.Length) : null;
            var time = file.LinkExists("time") ? Column(file, "time", path, x.Length) : null;
            return new SampleSet(x, y, time, path);
        }
        catch (InputException)
        {
            throw;
        }
        catch (OutOfMemoryException)
        {
            throw SamplesReader.Fault(path, "The file asked for more memory than there is.", "It is damaged or too large.");
        }
        catch (Exception exception)
        {
            // The library throws many kinds on a damaged file; none of them is the program's own fault.
            throw SamplesReader.Fault(path, $"The file could not be read as HDF5: {SamplesReader.FirstLine(exception.Message)}", "Write it again; it is damaged or uses a feature that is not read.");
        }
    }

    private static SampleSet ReadOne(IH5Dataset dataset, string path, int dimension)
    {
        var sizes = dataset.Space.Dimensions;
        if (sizes.Length is not (1 or 2))
            throw SamplesReader.Fault(path, $"The dataset samples had {sizes.Length} dimensions; it must be [N] or [N,d].");
        var columns = sizes.Length == 1 ? 1 : sizes[1];
        if (columns != (ulong)dimension)
            throw SamplesReader.WrongDimension(path, columns == 1 ? "one coordinate" : $"{columns} coordinates", dimension);
        var values = Values(dataset, "samples", path, sizes[0], sizes[0] * columns);
        var bad = SamplesKernels.FirstNotFinite(values);
        if (bad >= 0)
            throw SamplesReader.NotFinite(path, bad % dimension == 0 ? "x" : "y", bad / dimension + 1, values[bad], " of dataset samples");
        if (dimension == 1)
            return new SampleSet(values, null, null, path);
        var x = new double[sizes[0]];
        var y = new double[sizes[0]];
        for (var i = 0; i < x.Length; i++)
            (x[i], y[i]) = (values[2 * i], values[2 * i + 1]);
        return new SampleSet(x, y, null, path);
    }

    private static double[] Column(IH5Group file, string name, string path, int? rows)
    {
        var dataset = Dataset(file, name, path);
        var sizes = dataset.Space.Dimensions;
        if (sizes.Length != 1)
            throw SamplesReader.Fault(path, $"The dataset {name} had {sizes.Length} dimensions; it must have one.");
        if (rows is { } needed && sizes[0] != (ulong)needed)
            throw SamplesReader.Fault(path, string.Create(CultureInfo.InvariantCulture, $"The dataset {name} had {sizes[0]} values and x has {needed}; they must have the same number."));
        var values = Values(dataset, name, path, sizes[0], sizes[0]);
        var bad = SamplesKernels.FirstNotFinite(values);
        return bad < 0 ? values : throw SamplesReader.NotFinite(path, name, bad + 1, values[bad], " of its dataset");
    }

    private static IH5Dataset Dataset(IH5Group file, string name, string path)
        => file.Get(name) as IH5Dataset ?? throw SamplesReader.Fault(path, $"{name} was a group; it must be a dataset of numbers.");

    private static double[] Values(IH5Dataset dataset, string name, string path, ulong rows, ulong count)
    {
        if (rows == 0)
            throw SamplesReader.Fault(path, $"The dataset {name} had no rows; it must have at least one.");
        if (rows > SamplesReader.MostRows)
            throw SamplesReader.TooMany(path, (long)Math.Min(rows, long.MaxValue));
        if (dataset.Type.Class != H5DataTypeClass.FloatingPoint || dataset.Type.Size is not (4 or 8))
            throw SamplesReader.Fault(path, $"The dataset {name} did not hold float32 or float64 numbers; it must.");
        var values = new double[count];
        if (dataset.Type.Size == 8)
        {
            dataset.Read(values);
            return values;
        }

        var singles = new float[count];
        dataset.Read(singles);
        for (var i = 0; i < singles.Length; i++)
            values[i] = singles[i];
        return values;
    }

    /// <summary>Compares the file's length with the end that its first block states (HDF5 File Format Specification, "Superblock"; from memory).</summary>
    private static void CheckLength(string path)
    {
        Span<byte> start = stackalloc byte[96];
        long length;
        int got;
        using (var stream = File.OpenRead(path))
        {
            length = stream.Length;
            got = stream.ReadAtLeast(start, start.Length, throwOnEndOfStream: false);
        }

        if (got < 48)
            throw SamplesReader.Fault(path, string.Create(CultureInfo.InvariantCulture, $"The file ended at byte {got}, inside its first block; it was cut short."), "Copy it again.");
        var place = start[8] switch
        {
            0 => 40,
            1 => 44,
            2 or 3 => 28,
            _ => throw SamplesReader.Fault(path, string.Create(CultureInfo.InvariantCulture, $"The HDF5 version at byte 8 was {start[8]}; versions 0 to 3 are read.")),
        };
        var offsetSize = start[8] < 2 ? start[13] : start[9];
        if (offsetSize != 8)
            return;
        var end = BinaryPrimitives.ReadUInt64LittleEndian(start[place..]);
        if (end > (ulong)length)
        {
            throw SamplesReader.Fault(path, string.Create(
                CultureInfo.InvariantCulture, $"The file ended at byte {length}; its first block says that it has {end} bytes."), "It was cut short; copy it again.");
        }
    }
}
