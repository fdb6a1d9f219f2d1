using System.Text.Json;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Tests.Architecture;

namespace FlowSolver.Tests.Cli;

/// <summary>The stored reference is what the program prints. Tried: adding a key to CaseKeys without renewing the files fails here.</summary>
public sealed class CaseReferenceTests
{
    [Theory]
    [InlineData("reference.md", false)]
    [InlineData("case.schema.json", true)]
    public void StoredReference_IsWhatTheProgramPrints(string file, bool schema)
    {
        var stored = File.ReadAllText(Path.Combine(RoomArrowsTests.Root, "cases", file));
        Assert.True(stored == (schema ? CaseReference.Schema() : CaseReference.Markdown()),
            $"cases/{file} is out of date; renew it with: dotnet run --project src/FlowSolver.Cli -- reference{(schema ? " --schema" : "")} > cases/{file}");
    }

    [Fact]
    public void Markdown_NamesEveryKey()
    {
        var text = CaseReference.Markdown();
        Assert.All(CaseKeys.All, key => Assert.Contains($"| `{key.Name}` |", text, StringComparison.Ordinal));
    }

    [Fact]
    public void Schema_HoldsEveryKeyInItsTable()
    {
        using var schema = JsonDocument.Parse(CaseReference.Schema());
        foreach (var key in CaseKeys.All)
        {
            var place = schema.RootElement;
            foreach (var part in key.Path.Split('.'))
                place = place.GetProperty("properties").GetProperty(part);
            Assert.True(place.TryGetProperty("description", out _), key.Path);
        }
    }
}
