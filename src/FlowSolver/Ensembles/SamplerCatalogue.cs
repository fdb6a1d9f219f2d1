namespace FlowSolver.Ensembles;

/// <summary>Every sampler by its name in a case file. One row a sampler.</summary>
public static class SamplerCatalogue
{
    private static readonly Sampler[] Rows =
    [
        new UnadjustedLangevin(),
        new ProximalLangevin(),
    ];

    /// <summary>All samplers, in the order in which tables and figures show them.</summary>
    public static IReadOnlyList<Sampler> All => Rows;

    /// <summary>Finds a sampler; null when there is none of that name.</summary>
    public static Sampler? Find(string name) => Array.Find(Rows, row => row.Traits.Name == name);
}
