using System.Reflection;
using FlowSolver.Foundation;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>The gallery of cases that the program carries with it, as starting points for new ones.</summary>
public static class CaseTemplates
{
    /// <summary>The case that a new one is made from when none is named.</summary>
    public const string Default = "two-well-trap";

    private const string Prefix = "case/";

    /// <summary>Names of the gallery's cases, in alphabetical order.</summary>
    public static IReadOnlyList<string> Names { get; } =
    [
        .. Assembly.GetExecutingAssembly().GetManifestResourceNames()
            .Where(name => name.StartsWith(Prefix, StringComparison.Ordinal))
            .Select(name => name[Prefix.Length..])
            .Order(StringComparer.Ordinal),
    ];

    /// <summary>The text of a gallery case, comments included.</summary>
    /// <exception cref="InputException">There is no case of that name.</exception>
    public static string Text(string name = Default)
    {
        ArgumentNullException.ThrowIfNull(name);
        using var stream = Names.Contains(name) ? Assembly.GetExecutingAssembly().GetManifestResourceStream(Prefix + name) : null;
        if (stream is null)
        {
            var shown = name.Length > 40 ? name[..37] + "..." : name;
            throw new InputException(new InputFault(
                $"The gallery has no case \"{shown}\"; it must be one of {string.Join(", ", Names)}.",
                NearestName.Among(name, Names) is { } nearest ? $"Did you mean {nearest}?" : null));
        }

        using var reader = new StreamReader(stream);
        return reader.ReadToEnd().ReplaceLineEndings("\n");
    }

    /// <summary>The first line of a gallery case's comment: what it is.</summary>
    public static string Summary(string name)
    {
        var text = Text(name);
        return text[..text.IndexOf('\n', StringComparison.Ordinal)].TrimStart('#').Trim();
    }
}
