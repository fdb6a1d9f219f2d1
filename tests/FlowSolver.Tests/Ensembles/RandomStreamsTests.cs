using System.Runtime.InteropServices;
using System.Security.Cryptography;
using FlowSolver.Ensembles.RandomStreams;
using MathNet.Numerics.Distributions;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// Mutations tried: the sine of a pair replaced by its cosine; Normals_MillionDraws_FitTheLaw failed on the correlation of numbers 8 apart. The number
/// mixC of Philox.FourBatches made without the first word's product; FillBits_AnyPlace_EqualsOneCounterAtATime failed.
/// </summary>
public class RandomStreamsTests
{
    private static double[] Normals(int count, ulong offset = 0, ulong seed = 7, uint purpose = 3, uint step = 11)
    {
        var values = new double[count];
        new NormalDraws(seed, purpose, step).Fill(offset, values);
        return values;
    }

    [Theory]
    [InlineData(0UL)]
    [InlineData(37UL)]
    [InlineData((1UL << 33) - 21)]
    [InlineData((5UL << 36) + 16)]
    public void FillBits_AnyPlace_EqualsOneCounterAtATime(ulong offset)
    {
        var key = new StreamKey(0x123456789abcdef0, 5, 9);
        var words = new ulong[277];
        key.FillBits(offset, words);
        for (var i = 0; i < words.Length; i++)
        {
            var place = offset + (ulong)i;
            var counter = 8 * (place / 16) + place % 8;
            var (a, b, c, d) = Philox.Block((uint)counter, (uint)(counter >> 32), 9, 5, 0x9abcdef0, 0x12345678);
            Assert.Equal(place % 16 < 8 ? a | ((ulong)b << 32) : c | ((ulong)d << 32), words[i]);
        }
    }

    [Fact]
    public void Normals_FollowTheBits()
    {
        var key = new StreamKey(42, 1, 2);
        var words = new ulong[64];
        var numbers = new double[128];
        key.FillBits(16, words);
        new NormalDraws(key).Fill(32, numbers);
        for (var i = 0; i < words.Length; i++)
        {
            var u = (2 * (double)((words[i] >> 22) & 0xFFFFFFFFFF) + 1) * Math.ScaleB(1, -41);
            var angle = Math.PI / 2 * (2 * (double)(words[i] & 0x3FFFFF) + 1) * Math.ScaleB(1, -23);
            var radius = Math.Sqrt(-2 * Math.Log(u));
            var place = i / 8 * 16 + i % 8;
            Assert.InRange(numbers[place] - (words[i] >> 63 == 0 ? 1 : -1) * radius * Math.Cos(angle), -1e-11 * radius, 1e-11 * radius);
            Assert.InRange(numbers[place + 8] - ((words[i] >> 62) % 2 == 0 ? 1 : -1) * radius * Math.Sin(angle), -1e-11 * radius, 1e-11 * radius);
        }
    }

    [Fact]
    public void Uniforms_FollowTheBits()
    {
        var key = new StreamKey(42, 1, 2);
        var words = new ulong[100];
        var numbers = new double[100];
        key.FillBits(13, words);
        new UniformDraws(key).Fill(13, numbers);
        for (var i = 0; i < words.Length; i++)
            Assert.Equal((2 * (double)(words[i] >> 12) + 1) * Math.ScaleB(1, -53), numbers[i]);
    }

    [Theory]
    [InlineData(0, 1)]
    [InlineData(5, 40)]
    [InlineData(16, 512)]
    [InlineData(1, 1300)]
    public void Fill_AnyOffsetAndLength_SameNumbers(int offset, int count)
    {
        var all = Normals(2000);
        Assert.Equal(all.AsSpan(offset, count).ToArray(), Normals(count, (ulong)offset));
        var piecewise = new double[count];
        for (int at = 0, size = 1; at < count; at += size, size = size % 37 + 1)
            new NormalDraws(7, 3, 11).Fill((ulong)(offset + at), piecewise.AsSpan(at, Math.Min(size, count - at)));
        Assert.Equal(all.AsSpan(offset, count).ToArray(), piecewise);
    }

    /// <summary>
    /// The promise that numbers never change, at any vector width: the digests were made by this test with AVX-512 and again with
    /// DOTNET_EnableAVX512=0, with DOTNET_EnableAVX2=0 too, and with DOTNET_EnableHWIntrinsic=0, and were the same.
    /// </summary>
    [Fact]
    public void Fill_AtAnyVectorWidth_KeepsThePromisedBytes()
    {
        var uniforms = new double[5000];
        var exponentials = new double[5000];
        new UniformDraws(2024, 1).Fill(3, uniforms);
        new ExponentialDraws(2024, 1).Fill(3, exponentials);
        Assert.Equal("296F3ABD776C4A43", Digest(uniforms));
        Assert.Equal("A3A5BFC108EF9FFB", Digest(Normals(5000, 3)));
        Assert.Equal("54F8718778CABB30", Digest(exponentials));
    }

    private static string Digest(double[] values) => Convert.ToHexString(SHA256.HashData(MemoryMarshal.AsBytes(values.AsSpan())))[..16];

    [Fact]
    public void Normals_MillionDraws_FitTheLaw()
    {
        const int count = 1_000_000;
        var z = Normals(count);
        double m1 = 0, m2 = 0, m3 = 0, m4 = 0, lag8 = 0, lag1 = 0;
        for (var i = 0; i < count; i++)
        {
            m1 += z[i];
            m2 += z[i] * z[i];
            m3 += z[i] * z[i] * z[i];
            m4 += z[i] * z[i] * z[i] * z[i];
            lag8 += z[i] * z[i] * z[(i + 8) % count] * z[(i + 8) % count];
            lag1 += z[i] * z[(i + 1) % count];
        }

        // Four standard errors: variances of z, z², z³, z⁴ are 1, 2, 15, 96; of z²z'² (independent) 8.
        var root = Math.Sqrt(count);
        Assert.InRange(m1 / root, -4, 4);
        Assert.InRange((m2 - count) / root / Math.Sqrt(2), -4, 4);
        Assert.InRange(m3 / root / Math.Sqrt(15), -4, 4);
        Assert.InRange((m4 - 3.0 * count) / root / Math.Sqrt(96), -4, 4);
        Assert.InRange(lag1 / root, -4, 4);
        Assert.InRange((lag8 - count) / root / Math.Sqrt(8 + 4), -4, 4);
        AssertKolmogorov(z, Normal.CDF, 0, 1);
    }

    [Fact]
    public void Exponentials_FitTheLaw()
    {
        var e = new double[200_000];
        new ExponentialDraws(1, 2).Fill(0, e);
        AssertKolmogorov(e, (_, _, x) => -Math.Exp(-x) + 1, 0, 1);
    }

    [Fact]
    public void Streams_OtherSeedPurposeOrStep_AreUncorrelated()
    {
        const int count = 100_000;
        var reference = Normals(count);
        foreach (var other in new[] { Normals(count, seed: 8), Normals(count, purpose: 4), Normals(count, step: 12), Normals(count, 1 << 20), Normals(count, seed: 7UL + (1UL << 32)) })
        {
            var sum = 0.0;
            for (var i = 0; i < count; i++)
                sum += reference[i] * other[i];
            Assert.InRange(sum / Math.Sqrt(count), -4.5, 4.5);
        }
    }

    [Fact]
    public void Fill_AllocatesNothing()
    {
        var target = new double[4096];
        new NormalDraws(1, 1).Fill(0, target);
        var before = GC.GetAllocatedBytesForCurrentThread();
        for (var i = 0; i < 100; i++)
            new NormalDraws(1, 1, (uint)i).Fill(3, target);
        Assert.Equal(0, GC.GetAllocatedBytesForCurrentThread() - before);
    }

    // Kolmogorov's statistic √N·D; its 99.9 % point is 1.95 (tables of the limit law), the seed is fixed.
    private static void AssertKolmogorov(double[] sample, Func<double, double, double, double> cumulative, double a, double b)
    {
        Array.Sort(sample);
        var largest = 0.0;
        for (var i = 0; i < sample.Length; i++)
        {
            var f = cumulative(a, b, sample[i]);
            largest = Math.Max(largest, Math.Max((i + 1.0) / sample.Length - f, f - (double)i / sample.Length));
        }

        Assert.InRange(largest * Math.Sqrt(sample.Length), 0.3, 1.95);
    }
}
