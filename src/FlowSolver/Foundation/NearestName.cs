namespace FlowSolver.Foundation;

/// <summary>Finds the known name that a mistyped one was probably meant to be.</summary>
public static class NearestName
{
    /// <summary>
    /// The known name with the fewest edits (insert, delete, replace, swap neighbours; a change of case costs nothing) from
    /// <paramref name="found"/>, or null when even the nearest one needs more edits than a slip would: one for names up to 3 letters, two up to 6,
    /// otherwise a third of the length. Ties go to the name that stands first.
    /// </summary>
    public static string? Among(string found, IEnumerable<string> known)
    {
        ArgumentNullException.ThrowIfNull(found);
        ArgumentNullException.ThrowIfNull(known);
        // Nobody mistypes a name into something this long, and the table below is quadratic.
        if (found.Length is 0 or > 64)
            return null;
        string? best = null;
        var fewest = int.MaxValue;
        foreach (var name in known)
        {
            var edits = Edits(found, name);
            if (edits < fewest)
                (best, fewest) = (name, edits);
        }

        if (best is null)
            return null;
        var longest = Math.Max(found.Length, best.Length);
        var allowed = longest <= 3 ? 1 : longest <= 6 ? 2 : longest / 3;
        return fewest <= allowed && fewest < longest ? best : null;
    }

    // Restricted Damerau-Levenshtein distance: F. Damerau, Commun. ACM 7 (1964) 171-176 (from memory).
    private static int Edits(string a, string b)
    {
        var rows = new int[a.Length + 1, b.Length + 1];
        for (var i = 0; i <= a.Length; i++)
            rows[i, 0] = i;
        for (var j = 0; j <= b.Length; j++)
            rows[0, j] = j;
        for (var i = 1; i <= a.Length; i++)
        {
            for (var j = 1; j <= b.Length; j++)
            {
                var (left, right) = (char.ToLowerInvariant(a[i - 1]), char.ToLowerInvariant(b[j - 1]));
                var edits = Math.Min(Math.Min(rows[i - 1, j], rows[i, j - 1]) + 1, rows[i - 1, j - 1] + (left == right ? 0 : 1));
                if (i > 1 && j > 1 && left == char.ToLowerInvariant(b[j - 2]) && char.ToLowerInvariant(a[i - 2]) == right)
                    edits = Math.Min(edits, rows[i - 2, j - 2] + 1);
                rows[i, j] = edits;
            }
        }

        return rows[a.Length, b.Length];
    }
}
