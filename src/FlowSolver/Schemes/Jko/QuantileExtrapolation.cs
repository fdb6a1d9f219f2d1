namespace FlowSolver.Schemes.Jko;

/// <summary>
/// Goes as far again as half a step went: x ← 2x − xₙ, kept in order. Where parcels would fold (they were squeezed to less than half), they and so many
/// of their neighbours as give them room share the extrapolated distance in the proportions of the half step.
/// </summary>
internal sealed class QuantileExtrapolation(int count)
{
    /// <summary>Share of the mass whose limited extrapolation is worth a warning.</summary>
    public const double NoticeableMass = 1e-6;

    private const double LeastShare = 0.25;
    private readonly double[] middle = new double[count];
    private readonly double[] target = new double[count];

    /// <summary>Moves the solver's nodes; returns the share of the mass where the extrapolation was limited.</summary>
    /// <param name="solver">Stands at the end of the half step.</param>
    /// <param name="widthsBefore">Widths before the half step, in the order of the rows.</param>
    /// <param name="endsBefore">Ends of the lanes before the half step.</param>
    public double Double(QuantileNewton solver, double[] widthsBefore, double[] endsBefore)
    {
        var gap = solver.Gap;
        var folds = false;
        for (var i = 0; i < gap.Length; i++)
            folds |= !(2 * gap[i] - widthsBefore[i] >= LeastShare * gap[i]);
        for (var i = 0; i < endsBefore.Length; i++)
            solver.Ends[i] = 2 * solver.Ends[i] - endsBefore[i];
        if (!folds)
        {
            for (var i = 0; i < gap.Length; i++)
                gap[i] = 2 * gap[i] - widthsBefore[i];
            return 0;
        }

        for (var j = 0; j < count; j++)
        {
            var place = solver.PlaceOf(j);
            middle[j] = gap[place];
            target[j] = 2 * gap[place] - widthsBefore[place];
        }

        var limited = Limit(solver);
        for (var j = 0; j < count; j++)
            gap[solver.PlaceOf(j)] = target[j];
        solver.PlaceEnds(solver.Ends[0]);
        return limited;
    }

    private double Limit(QuantileNewton solver)
    {
        var mass = 0.0;
        var j = 0;
        while (j < count)
        {
            if (target[j] >= LeastShare * middle[j])
            {
                j++;
                continue;
            }

            // A window around the fold that has room; both ends keep their extrapolated places.
            var (low, high) = (j, j);
            var (room, need) = (target[j], middle[j]);
            while (room < LeastShare * need && (low > 0 || high < count - 1))
            {
                if (high < count - 1)
                {
                    high++;
                    (room, need) = (room + target[high], need + middle[high]);
                }

                if (low > 0 && room < LeastShare * need)
                {
                    low--;
                    (room, need) = (room + target[low], need + middle[low]);
                }
            }

            for (var k = low; k <= high; k++)
            {
                target[k] = middle[k] * (room / need);
                mass += solver.Mass[solver.PlaceOf(k)];
            }

            j = high + 1;
        }

        return mass;
    }
}
