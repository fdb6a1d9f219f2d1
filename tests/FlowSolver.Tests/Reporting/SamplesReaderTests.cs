using System.Buffers.Binary;
using System.Globalization;
using System.Text;
using CsCheck;
using FlowSolver.Foundation;
using FlowSolver.Reporting.Samples;
using PureHDF;

namespace FlowSolver.Tests.Reporting;

/// <summary>
/// Files of samples, right and broken. Mutation tried: byte order of big-endian arrays left as it is; the round trip failed. Mutation tried: the row
/// counted from 0; the broken files of which a row is named failed.
/// </summary>
public sealed class SamplesReaderTests : IDisposable
{
    private readonly DirectoryInfo folder = Directory.CreateTempSubdirectory("flowsolver-test-");

    public void Dispose() => folder.Delete(recursive: true);

    private string Write(string name, byte[] bytes)
    {
        var path = Path.Combine(folder.FullName, name);
        File.WriteAllBytes(path, bytes);
        return path;
    }

    private string Write(string name, string text) => Write(name, Encoding.UTF8.GetBytes(text));

    [Theory]
    [InlineData("x\n1\n-2.5\n3e-2\n", 1)]
    [InlineData("x\r\n1\r\n-2.5\r\n3e-2\r\n", 1)]
    [InlineData("\uFEFFx\n1\n-2.5\n3e-2", 1)]
    [InlineData(" X \n 1\n\n-2.5 \n3e-2\n\n", 1)]
    [InlineData("\"x\"\n\"1\"\n-2.5\n+0.03\n", 1)]
    [InlineData("x,y\n1,4\n-2.5,5\n3e-2,6\n", 2)]
    [InlineData("time,y,x\n0,4,1\n0.5,5,-2.5\n1,6,0.03\n", 2)]
    public void Read_Csv_GivesTheNumbers(string text, int dimension)
    {
        var set = SamplesReader.Read(Write("s.csv", text), dimension);
        Assert.Equal([1, -2.5, 0.03], set.X);
        if (dimension == 2)
            Assert.Equal([4, 5, 6], set.Y!);
        else
            Assert.Null(set.Y);
        if (text.Contains("time", StringComparison.Ordinal))
            Assert.Equal([0, 0.5, 1], set.Time!);
        else
            Assert.Null(set.Time);
        Assert.Equal(3, set.Count);
    }

    public static TheoryData<string, string, int, int?, string> BrokenCsv => new()
    {
        // Name, text, dimension, line, part of the sentence.
        { "s.csv", "", 1, null, "was empty" },
        { "s.csv", "x\n", 1, 1, "a header and no rows" },
        { "s.csv", "x\n1\ntwo\n", 1, 3, "x was \"two\" in row 2; it must be a finite number" },
        { "s.csv", "x\n1\n2,5\n", 1, 3, "Row 2 had 2 values; it must have 1" },
        { "s.csv", "x,y\n1,2\n3\n", 2, 3, "Row 2 had 1 value; it must have 2" },
        { "s.csv", "x\n1\n\"\"\n", 1, 3, "x was empty in row 2" },
        { "s.csv", "x,y\n1,2\n3,\n", 2, 3, "y was empty in row 2" },
        { "s.csv", "x\n1\nNaN\n", 1, 3, "x was not a number in row 2; it must be finite" },
        { "s.csv", "x\n1\n2\n\n-Infinity\n", 1, 5, "x was minus infinity in row 3" },
        { "s.csv", "x\n1e999\n", 1, 2, "x was infinite in row 1" },
        { "s.csv", "x,time\n1,0\n2,nan\n", 1, 3, "time was" },
        { "s.csv", "x\n1\n2 3\n", 1, 3, "x was \"2 3\" in row 2" },
        { "s.csv", "x\n0x10\n", 1, 2, "x was \"0x10\" in row 1" },
        { "s.csv", "y\n1\n", 1, 1, "no column x" },
        { "s.csv", "0.1,0.2\n0.3,0.4\n", 2, 1, "The first line held the number 0.1; it must be a header" },
        { "s.csv", "x;y\n1;2\n", 2, 1, "separated by commas" },
        { "s.csv", "x\ty\n1\t2\n", 2, 1, "separated by commas" },
        { "s.csv", "x,tme\n1,2\n", 1, 1, "named the column \"tme\"; its columns must be x[,y][,time]. Did you mean time?" },
        { "s.csv", "x,walker\n1,2\n", 1, 1, "named the column \"walker\"" },
        { "s.csv", "x,x\n1,2\n", 1, 1, "named the column x twice" },
        { "s.csv", "x,y\n1,2\n", 1, null, "The samples have a column y and the case has one axis; they must agree." },
        { "s.csv", "x\n1\n", 2, null, "The samples have no column y and the case has two axes" },
        { "s.csv", "x\n\"1\n2\n3\n", 1, 2, "not CSV" },
        { "s.csv", "x\n1\n2\u0000\n", 1, null, "byte 5 was 0" },
        { "s.npy", "x\n1\n", 1, null, "called .npy but byte 0 does not begin the mark" },
        { "s.h5", "x\n1\n", 1, null, "called HDF5 but byte 0 does not begin the mark" },
    };

    [Theory]
    [MemberData(nameof(BrokenCsv))]
    public void Read_BrokenCsv_NamesRowAndLine(string name, string text, int dimension, int? line, string part)
    {
        var path = Write(name, text);
        var fault = Assert.Throws<InputException>(() => SamplesReader.Read(path, dimension)).Faults.Single();
        Assert.Contains(part, fault.ToString(), StringComparison.Ordinal);
        Assert.Equal(line, fault.Line);
        Assert.Equal(path, fault.File);
        Assert.EndsWith(".", fault.Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Read_TooFewRows_Refused()
    {
        var path = Write("s.csv", "x\n1\n");
        Assert.Equal(1, SamplesReader.Read(path, 1).Count);
        Assert.Contains("The file held 1 row of samples; it must hold at least 2.", Assert.Throws<InputException>(() => SamplesReader.Read(path, 1, leastRows: 2)).Message, StringComparison.Ordinal);
        Assert.Contains("does not exist", Assert.Throws<InputException>(() => SamplesReader.Read(path + "x", 1)).Message, StringComparison.Ordinal);
        Assert.Contains("was a directory", Assert.Throws<InputException>(() => SamplesReader.Read(folder.FullName, 1)).Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Read_LongLineWithoutEnd_RefusedBeforeItFillsTheMemory()
    {
        var fault = Assert.Throws<InputException>(() => SamplesReader.Read(Write("s.csv", "x\n" + new string('1', 3_000_000)), 1)).Faults.Single();
        Assert.Contains("not CSV", fault.Message, StringComparison.Ordinal);
    }

    [Fact]
    public void Read_ManyRows_KeepsOrderAndDigits()
    {
        const int rows = 200_000;
        var text = new StringBuilder("x,y\n");
        for (var i = 0; i < rows; i++)
            text.Append(CultureInfo.InvariantCulture, $"{i / 7.0:R},{-i * 1e-9:R}\n");
        var set = SamplesReader.Read(Write("s.csv", text.ToString()), 2);
        Assert.Equal(rows, set.Count);
        for (var i = 0; i < rows; i++)
            Assert.True(set.X[i] == i / 7.0 && set.Y![i] == -i * 1e-9, $"row {i}");
    }

    private static byte[] Npy(string type, string order, string shape, byte[] data, byte version = 1, string? header = null)
    {
        header ??= $"{{'descr': '{type}', 'fortran_order': {order}, 'shape': {shape}, }}";
        var lead = version == 1 ? 10 : 12;
        var padded = header.PadRight((lead + header.Length + 1 + 63) / 64 * 64 - lead - 1) + "\n";
        var file = new byte[lead];
        ((ReadOnlySpan<byte>)[0x93, (byte)'N', (byte)'U', (byte)'M', (byte)'P', (byte)'Y', version, 0]).CopyTo(file);
        if (version == 1)
            BinaryPrimitives.WriteUInt16LittleEndian(file.AsSpan(8), (ushort)padded.Length);
        else
            BinaryPrimitives.WriteUInt32LittleEndian(file.AsSpan(8), (uint)padded.Length);
        return [.. file, .. Encoding.Latin1.GetBytes(padded), .. data];
    }

    private static byte[] Data(string type, params double[] values)
    {
        var bytes = new List<byte>();
        foreach (var value in values)
        {
            var one = type[2] == '8' ? BitConverter.GetBytes(value) : BitConverter.GetBytes((float)value);
            if (type[0] == '>')
                Array.Reverse(one);
            bytes.AddRange(one);
        }

        return [.. bytes];
    }

    [Theory]
    [InlineData("<f8", 1)]
    [InlineData(">f8", 1)]
    [InlineData("<f4", 1)]
    [InlineData(">f4", 1)]
    [InlineData("=f8", 1)]
    [InlineData("<f8", 2)]
    [InlineData(">f4", 2)]
    [InlineData("<f8", 3)]
    public void Read_Npy_AnyTypeOrderAndVersion(string type, byte version)
    {
        double[] first = [1, -2.5, 0.25, 1e10, -0.125];
        double[] second = [4, 5, -6, 7.5, 0];
        var line = SamplesReader.Read(Write("a.npy", Npy(type, "False", "(5,)", Data(type, first), version)), 1);
        Assert.Equal(first, line.X);
        Assert.Null(line.Y);
        Assert.Equal(first, SamplesReader.Read(Write("b.npy", Npy(type, "False", "(5, 1)", Data(type, first), version)), 1).X);
        double[] rows = [1, 4, -2.5, 5, 0.25, -6, 1e10, 7.5, -0.125, 0];
        var plane = SamplesReader.Read(Write("c.npy", Npy(type, "False", "(5, 2)", Data(type, rows), version)), 2);
        Assert.Equal(first, plane.X);
        Assert.Equal(second, plane.Y!);
        var fortran = SamplesReader.Read(Write("d.npy", Npy(type, "True", "(5, 2)", Data(type, [.. first, .. second]), version)), 2);
        Assert.Equal(first, fortran.X);
        Assert.Equal(second, fortran.Y!);
    }

    /// <summary>Longer than the reader's buffer, so that columns and rows straddle its pieces.</summary>
    [Theory]
    [InlineData("True", "<f8")]
    [InlineData("False", "<f8")]
    [InlineData("True", "<f4")]
    [InlineData("False", ">f4")]
    public void Read_LongNpy_KeepsRowsTogether(string order, string type)
    {
        const int rows = 300_001;
        var values = new double[2 * rows];
        for (var i = 0; i < rows; i++)
        {
            values[order == "True" ? i : 2 * i] = i;
            values[order == "True" ? rows + i : 2 * i + 1] = -2.0 * i;
        }

        var set = SamplesReader.Read(Write("l.npy", Npy(type, order, $"({rows}, 2)", Data(type, values))), 2);
        for (var i = 0; i < rows; i++)
            Assert.True(set.X[i] == i && set.Y![i] == -2.0 * i, $"row {i}");
    }

    public static TheoryData<string, byte[], int, string> BrokenNpy
    {
        get
        {
            var good = Npy("<f8", "False", "(3,)", Data("<f8", 1, 2, 3));
            var ten = Data("<f8", 0, 1, 2, 3, 4, 5, 6, 7, 8, 9);
            return new()
            {
                { "cut in the header", good[..40], 1, "inside its header" },
                { "cut in the lead", good[..9], 1, "The file ended at byte 9, inside its header" },
                { "cut in the data", good[..^1], 1, "The file ended at byte 151; with 3 rows it must have 152 bytes" },
                { "too long", [.. good, 0], 1, "The file went on after byte 152, where its 3 rows end" },
                { "version", [.. good[..6], 9, .. good[7..]], 1, "format version at byte 6 was 9; versions 1 to 3" },
                { "integers", Npy("<i8", "False", "(3,)", Data("<f8", 1, 2, 3)), 1, "element type was \"<i8\"; it must be float32 or float64" },
                { "complex", Npy("<c16", "False", "(3,)", new byte[48]), 1, "element type was \"<c16\"" },
                { "half", Npy("<f2", "False", "(3,)", new byte[6]), 1, "element type was \"<f2\"" },
                { "objects", Npy("|O", "False", "(3,)", new byte[24]), 1, "element type was \"|O\"" },
                { "record", Npy("", "", "", new byte[24], 1, "{'descr': [('x', '<f8')], 'fortran_order': False, 'shape': (3,), }"), 1, "element type was" },
                { "scalar", Npy("<f8", "False", "()", Data("<f8", 1)), 1, "shape was (); it must be [N] or [N,d]" },
                { "three axes", Npy("<f8", "False", "(1, 3, 1)", Data("<f8", 1, 2, 3)), 1, "shape was (1, 3, 1)" },
                { "transposed", Npy("<f8", "False", "(2, 5)", ten), 2, "The samples have 5 coordinates and the case has two axes" },
                { "wide", Npy("<f8", "False", "(1, 5000)", ten), 2, "Is it transposed?" },
                { "one coordinate", Npy("<f8", "False", "(10,)", ten), 2, "The samples have one coordinate and the case has two axes" },
                { "two coordinates", Npy("<f8", "False", "(5, 2)", ten), 1, "The samples have 2 coordinates and the case has one axis" },
                { "no rows", Npy("<f8", "False", "(0,)", []), 1, "The array had no rows" },
                { "far too many", Npy("<f8", "False", "(1000000000000,)", ten), 1, "rows; at most 200000000 are read" },
                { "absurd shape", Npy("<f8", "False", "(99999999999999999999,)", ten), 1, "no readable shape" },
                { "negative shape", Npy("<f8", "False", "(-3,)", ten), 1, "no readable shape" },
                { "open shape", Npy("", "", "", ten, 1, "{'descr': '<f8', 'fortran_order': False, 'shape': (3,"), 1, "no readable shape" },
                { "no order", Npy("", "", "", ten, 1, "{'descr': '<f8', 'shape': (10,), }"), 1, "no readable fortran_order" },
                { "odd order", Npy("<f8", "Maybe", "(10,)", ten), 1, "no readable fortran_order" },
                { "no type", Npy("", "", "", ten, 1, "{'fortran_order': False, 'shape': (10,), }"), 1, "no readable descr" },
                { "not a number", Npy("<f8", "False", "(3,)", Data("<f8", 1, double.NaN, 3)), 1, "x was not a number in row 2 (byte 136); it must be finite" },
                { "infinite", Npy("<f8", "False", "(2, 2)", Data("<f8", 1, 2, 3, double.PositiveInfinity)), 2, "y was infinite in row 2 (byte 152)" },
                { "infinite in Fortran order", Npy("<f8", "True", "(2, 2)", Data("<f8", 1, 2, double.NegativeInfinity, 4)), 2, "y was minus infinity in row 1 (byte 144)" },
            };
        }
    }

    [Theory]
    [MemberData(nameof(BrokenNpy))]
    public void Read_BrokenNpy_NamesRowOrByte(string name, byte[] bytes, int dimension, string part)
    {
        var path = Write("s.npy", bytes);
        var fault = Assert.Throws<InputException>(() => SamplesReader.Read(path, dimension)).Faults.Single();
        Assert.True(fault.ToString().Contains(part, StringComparison.Ordinal), $"{name}: {fault}");
        Assert.Equal(path, fault.File);
    }

    private string WriteHdf5(Action<H5File> fill)
    {
        var file = new H5File();
        fill(file);
        var path = Path.Combine(folder.FullName, $"s{Guid.NewGuid():N}.h5");
        file.Write(path);
        return path;
    }

    [Fact]
    public void Read_Hdf5_GivesTheNumbers()
    {
        var one = SamplesReader.Read(WriteHdf5(file => file["x"] = new[] { 1.0, 2.5 }), 1);
        Assert.Equal([1, 2.5], one.X);
        var three = SamplesReader.Read(WriteHdf5(file =>
        {
            file["x"] = new[] { 1f, 2.5f };
            file["y"] = new[] { -1.0, 4.0 };
            file["time"] = new[] { 0.0, 3.0 };
        }), 2);
        Assert.Equal([1, 2.5], three.X);
        Assert.Equal([-1, 4], three.Y!);
        Assert.Equal([0, 3], three.Time!);
        var table = SamplesReader.Read(WriteHdf5(file => file["samples"] = new H5Dataset(new[,] { { 1.0, 2.0 }, { 3.0, 4.0 }, { 5.0, 6.0 } })), 2);
        Assert.Equal([1, 3, 5], table.X);
        Assert.Equal([2, 4, 6], table.Y!);
        Assert.Equal([7, 8], SamplesReader.Read(WriteHdf5(file => file["samples"] = new[] { 7.0, 8.0 }), 1).X);
    }

    public static TheoryData<string, int, string> BrokenHdf5 => new()
    {
        { "none", 1, "no dataset x and none called samples;" },
        { "y-missing", 2, "The samples have no dataset y and the case has two axes" },
        { "y-given", 1, "The samples have a dataset y and the case has one axis" },
        { "lengths", 2, "The dataset y had 3 values and x has 2; they must have the same number." },
        { "integers", 1, "did not hold float32 or float64" },
        { "text", 1, "did not hold float32 or float64" },
        { "nan", 1, "x was not a number in row 2 of its dataset" },
        { "samples-nan", 2, "y was infinite in row 1 of dataset samples" },
        { "samples-3", 2, "The samples have 3 coordinates and the case has two axes" },
        { "matrix", 1, "The dataset x had 2 dimensions; it must have one." },
        { "group", 1, "x was a group; it must be a dataset of numbers." },
        { "empty-file", 1, "no dataset x and none called samples;" },
    };

    [Theory]
    [MemberData(nameof(BrokenHdf5))]
    public void Read_BrokenHdf5_SaysWhat(string name, int dimension, string part)
    {
        var path = WriteHdf5(file =>
        {
            switch (name)
            {
                case "none": file["z"] = new[] { 1.0 }; break;
                case "y-missing": file["x"] = new[] { 1.0 }; break;
                case "y-given": (file["x"], file["y"]) = (new[] { 1.0 }, new[] { 1.0 }); break;
                case "lengths": (file["x"], file["y"]) = (new[] { 1.0, 2 }, new[] { 1.0, 2, 3 }); break;
                case "integers": file["x"] = new[] { 1, 2 }; break;
                case "text": file["x"] = new[] { "1", "2" }; break;
                case "nan": file["x"] = new[] { 1.0, double.NaN }; break;
                case "samples-nan": file["samples"] = new H5Dataset(new[,] { { 1.0, double.PositiveInfinity } }); break;
                case "samples-3": file["samples"] = new H5Dataset(new[,] { { 1.0, 2, 3 } }); break;
                case "matrix": file["x"] = new H5Dataset(new[,] { { 1.0, 2, 3 } }); break;
                case "group": file["x"] = new H5Group(); break;
                default: break;
            }
        });
        var fault = Assert.Throws<InputException>(() => SamplesReader.Read(path, dimension)).Faults.Single();
        Assert.Contains(part, fault.ToString(), StringComparison.Ordinal);
    }

    [Fact]
    public void Read_Hdf5CutShort_NamesTheByte()
    {
        var bytes = File.ReadAllBytes(WriteHdf5(file => file["x"] = new double[1000]));
        foreach (var length in new[] { 8, 30, 47, 100, 500, bytes.Length / 2, bytes.Length - 1 })
        {
            var fault = Assert.Throws<InputException>(() => SamplesReader.Read(Write("cut.h5", bytes[..length]), 1)).Faults.Single();
            Assert.Contains($"The file ended at byte {length}", fault.Message, StringComparison.Ordinal);
        }
    }

    /// <summary>A soft link that leads back to itself: the library would follow it until the stack is gone.</summary>
    [Fact]
    public void Read_Hdf5LinkToItself_Refused()
    {
        var bytes = File.ReadAllBytes(WriteHdf5(file => file["x"] = new[] { 1.0, 2.0, 3.0 }));
        // The link message of x: version 1, flags 0x12, character set, name length in four bytes, the name.
        var at = bytes.AsSpan().IndexOf((ReadOnlySpan<byte>)[0x01, 0x12, 0x01, 0x01, 0x00, 0x00, 0x00, (byte)'x']);
        Assert.True(at > 0);
        // Flags 0x0a say that a link type follows, and the 1 that stands there means soft; its value is the one letter x.
        bytes[at + 1] = 0x0A;
        ((ReadOnlySpan<byte>)[1, 0, (byte)'x']).CopyTo(bytes.AsSpan(at + 8));
        var fault = Assert.Throws<InputException>(() => SamplesReader.Read(Write("loop.h5", bytes), 1)).Faults.Single();
        Assert.Contains("x was a link to another place", fault.Message, StringComparison.Ordinal);
    }

    /// <summary>Damaged files of every kind and rubbish: refused or read, never a crash.</summary>
    [Fact]
    public void Read_DamagedFile_NeverCrashes()
    {
        byte[][] good =
        [
            Encoding.UTF8.GetBytes("x\n1\n-2.5\n3e-2\n0.125\n"),
            Npy("<f8", "False", "(4,)", Data("<f8", 1, 2, 3, 4)),
            File.ReadAllBytes(WriteHdf5(file => file["x"] = new[] { 1.0, 2.0, 3.0 })),
            [],
        ];
        var path = Path.Combine(folder.FullName, "damaged.bin");
        Gen.Select(Gen.Int[0, 3], Gen.Select(Gen.Int[0, 100000], Gen.Byte).Array[1, 6], Gen.Byte.Array[0, 200]).Sample((kind, changes, rubbish) =>
        {
            var bytes = (byte[])(kind == 3 ? rubbish : good[kind]).Clone();
            foreach (var (place, value) in changes)
            {
                if (bytes.Length > 0)
                    bytes[place % bytes.Length] = value;
            }

            File.WriteAllBytes(path, bytes);
            try
            {
                var set = SamplesReader.Read(path, 1);
                Assert.All(set.X, value => Assert.True(double.IsFinite(value)));
            }
            catch (InputException exception)
            {
                Assert.EndsWith(".", exception.Faults.Single().Message, StringComparison.Ordinal);
            }
        }, iter: 500, threads: 1);
    }
}
