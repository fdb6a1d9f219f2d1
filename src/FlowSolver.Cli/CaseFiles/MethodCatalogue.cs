using FlowSolver.Ensembles;
using FlowSolver.Schemes;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>The names that a case may use for methods and samplers, and the dimensions that each serves.</summary>
/// <param name="Flows">Names of flow methods.</param>
/// <param name="FlowDimensions">The dimensions that a flow method of a known name serves.</param>
/// <param name="Samplers">Names of samplers.</param>
public sealed record MethodCatalogue(IReadOnlyList<string> Flows, Func<string, IReadOnlyList<int>> FlowDimensions, IReadOnlyList<string> Samplers)
{
    /// <summary>What the library offers.</summary>
    public static MethodCatalogue OfLibrary { get; } = new(
        [.. SchemeCatalogue.All.Select(scheme => scheme.Traits.Name)],
        name => SchemeCatalogue.Find(name)?.Traits.Dimensions ?? [],
        [.. SamplerCatalogue.All.Select(sampler => sampler.Traits.Name)]);
}
