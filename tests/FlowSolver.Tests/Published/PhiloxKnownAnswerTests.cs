using FlowSolver.Ensembles.RandomStreams;

namespace FlowSolver.Tests.Published;

/// <summary>
/// Source: J. K. Salmon, M. A. Moraes, R. O. Dror, D. E. Shaw, Parallel random numbers: as easy as 1, 2, 3, SC'11 (2011), and the known-answer
/// values that its authors publish with it, philox4x32 with 10 rounds; from memory.
/// Mutation tried: nine rounds instead of ten; both tests failed.
/// </summary>
public class PhiloxKnownAnswerTests
{
    public static TheoryData<uint[], uint[], uint[]> Answers => new()
    {
        { [0, 0, 0, 0], [0, 0], [0x6627e8d5, 0xe169c58d, 0xbc57ac4c, 0x9b00dbd8] },
        { [0xffffffff, 0xffffffff, 0xffffffff, 0xffffffff], [0xffffffff, 0xffffffff], [0x408f276d, 0x41c83b0e, 0xa20bc7c6, 0x6d5451fd] },
        { [0x243f6a88, 0x85a308d3, 0x13198a2e, 0x03707344], [0xa4093822, 0x299f31d0], [0xd16cfe09, 0x94fdcceb, 0x5001e420, 0x24126ea1] },
    };

    [Theory]
    [MemberData(nameof(Answers))]
    public void Block_PublishedCounters_GiveThePublishedWords(uint[] counter, uint[] key, uint[] words)
    {
        var (a, b, c, d) = Philox.Block(counter[0], counter[1], counter[2], counter[3], key[0], key[1]);
        Assert.Equal(words, new[] { a, b, c, d });
    }

    [Theory]
    [MemberData(nameof(Answers))]
    public void Batch_PublishedCounters_GiveThePublishedWords(uint[] counter, uint[] key, uint[] words)
    {
        var index = counter[0] | ((ulong)counter[1] << 32);
        var lane = (int)(index % 8);
        var (first, second) = Philox.Batch(index - (ulong)lane, counter[2] | ((ulong)counter[3] << 32), key[0] | ((ulong)key[1] << 32));
        Assert.Equal(words, new[] { (uint)first[lane], (uint)(first[lane] >> 32), (uint)second[lane], (uint)(second[lane] >> 32) });
    }
}
