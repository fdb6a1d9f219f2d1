using FlowSolver.Cli.CaseFiles;
using FlowSolver.Schemes;
using FlowSolver.Schemes.Jko;

namespace FlowSolver.Cli.Commands;

/// <summary>Schemes by the names of a case, with the case's options.</summary>
internal static class CaseMethods
{
    /// <summary>The scheme of that name. Names have been checked when the case was read.</summary>
    public static FlowScheme Scheme(string name, CaseFile read)
        => SchemeCatalogue.Find(name) switch
        {
            JkoScheme jko => new JkoScheme(read.Tolerances.DualGap, jko.Parcels),
            var scheme => scheme!,
        };
}
