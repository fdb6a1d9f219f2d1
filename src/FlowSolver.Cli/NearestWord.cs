namespace FlowSolver.Cli;

/// <summary>Finds the known word that a mistyped one was meant to be.</summary>
internal static class NearestWord
{
    /// <summary>The nearest of <paramref name="known"/>; null when none is near (more than a third of the letters differ, and more than two).</summary>
    public static string? Of(string word, IEnumerable<string> known)
    {
        var best = known.Select(candidate => (candidate, distance: Distance(word, candidate))).OrderBy(pair => pair.distance).FirstOrDefault();
        return best.candidate is not null && best.distance <= Math.Max(2, word.Length / 3) ? best.candidate : null;
    }

    // Edit distance with swaps of neighbours (optimal string alignment).
    private static int Distance(string a, string b)
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
                var change = char.ToLowerInvariant(a[i - 1]) == char.ToLowerInvariant(b[j - 1]) ? 0 : 1;
                rows[i, j] = Math.Min(Math.Min(rows[i - 1, j] + 1, rows[i, j - 1] + 1), rows[i - 1, j - 1] + change);
                if (i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1])
                    rows[i, j] = Math.Min(rows[i, j], rows[i - 2, j - 2] + 1);
            }
        }

        return rows[a.Length, b.Length];
    }
}
