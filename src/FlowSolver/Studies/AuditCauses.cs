using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes.Splitting;
using FlowSolver.Transport;

namespace FlowSolver.Studies;

/// <summary>Looks for the mistake that would produce the samples.</summary>
internal static class AuditCauses
{
    // Steps after which a sampler's law counts as stationary when it is started from π; its bias builds up within the wells in far fewer.
    private const int StationarySteps = 400;

    public static (string Cause, IReadOnlyList<AuditAlternative> Alternatives) Seek(
        GridProblem problem, TimePlan plan, AuditSamples set, AuditRow row, WorkerTeam team, CancellationToken cancellation)
    {
        if (row.Distance is not { } own || row.Noise95 is not { } noise)
            return ("", []);
        // Sorted once: every distance on the line sorts its samples, and sorting what is sorted is quick.
        if (set.Y is null)
        {
            set = set with { X = (double[])set.X.Clone() };
            Array.Sort(set.X);
        }

        var search = new Search(problem, plan, set, noise + 2 * (row.GridError ?? 0), team, cancellation);
        var list = new List<AuditAlternative> { new("the case's law", "The samples follow the law of the case.", null, own, false) };
        foreach (var found in new[] { search.Units(), search.Temperature(), search.Time(), search.Sampler(SplittingScheme.Gradient, "ula"), search.Sampler(SplittingScheme.Proximal, "proximal-ula") })
        {
            if (found is not null)
                list.Add(found);
        }

        var ordered = list.OrderBy(alternative => alternative.Distance).ToList();
        return (Sentence(ordered, row, set), ordered);
    }

    private static string Sentence(List<AuditAlternative> ordered, AuditRow row, AuditSamples set)
    {
        var outside = row.Notes.FirstOrDefault(note => note.Contains("outside the walls", StringComparison.Ordinal));
        var explaining = ordered.Where(alternative => alternative.Explains).ToList();
        if (explaining.Count == 0)
        {
            var hint = outside ?? row.Notes.FirstOrDefault(note => note.Contains("rounded", StringComparison.Ordinal) || note.Contains("repeats", StringComparison.Ordinal));
            var nearest = ordered[0].Name == "the case's law" ? "" : $" The nearest is {ordered[0].Name}: {ordered[0].Sentence}";
            return $"None of the usual mistakes explains the samples.{nearest}{(hint is null ? "" : " " + hint)}";
        }

        var first = explaining[0].Sentence;
        return explaining.Count == 1
            ? first
            : $"{first} Equally possible, and not to be told apart by {set.X.Length} samples: {string.Join("; ", explaining.Skip(1).Select(alternative => alternative.Name + (alternative.Value is { } v ? FormattableString.Invariant($" ({v:g3})") : "")))}.";
    }

    private sealed class Search(GridProblem problem, TimePlan plan, AuditSamples set, double noise, WorkerTeam team, CancellationToken cancellation)
    {
        private readonly Grid grid = problem.Grid;

        public AuditAlternative? Units()
        {
            // Powers of ten between units of length, degrees for radians, and the other way round.
            AuditAlternative? best = null;
            foreach (var (factor, text) in new[]
            {
                (1e-3, "in units a thousand times smaller"), (1e3, "in units a thousand times larger"), (1e-1, "in units ten times smaller"), (10.0, "in units ten times larger"),
                (1e-2, "in units a hundred times smaller"), (100.0, "in units a hundred times larger"), (1e-6, "in units a million times smaller"), (1e6, "in units a million times larger"),
                (Math.PI / 180, "in degrees where radians were meant"), (-1.0, "with the opposite sign"),
            })
            {
                var x = Array.ConvertAll(set.X, value => value * factor);
                var y = set.Y is null ? null : Array.ConvertAll(set.Y, value => value * factor);
                if (SampleDistance.Between(x, y ?? [], SamplerAudit.LawAt(problem, set.Time, team), team) is not { } found)
                    return null;
                if (best is null || found.Distance < best.Distance)
                    best = new AuditAlternative("other units", $"The positions seem to be written {text}.", factor, found.Distance, found.Distance <= noise);
            }

            return best;
        }

        public AuditAlternative? Temperature()
        {
            var best = Minimise(-2.3, 2.3, logarithm => Law(problem.Problem with { Temperature = problem.Problem.Temperature * Math.Exp(logarithm) }, set.Time));
            if (best is not { } found)
                return null;
            var temperature = problem.Problem.Temperature * Math.Exp(found.Place);
            return new AuditAlternative("another temperature",
                FormattableString.Invariant($"The samples follow the law at temperature {temperature:g4} instead of {problem.Problem.Temperature:g4}: noise of the wrong size would do that."),
                temperature, found.Distance, found.Distance <= noise);
        }

        public AuditAlternative? Time()
        {
            if (set.Time is { } asked)
            {
                if (asked <= 0)
                    return null;
                var scaled = Minimise(-2.3, 2.3, logarithm => SamplerAudit.LawAt(problem, asked * Math.Exp(logarithm), team));
                if (scaled is not { } at)
                    return null;
                var time = asked * Math.Exp(at.Place);
                return new AuditAlternative("another time or mobility",
                    FormattableString.Invariant($"The samples follow the law at time {time:g4} instead of {asked:g4}: a wrong mobility, friction or time step would do that."), time, at.Distance, at.Distance <= noise);
            }

            var last = plan.ReportTimes[^1];
            var early = Minimise(Math.Log(plan.Step), Math.Log(20 * last), logarithm => SamplerAudit.LawAt(problem, Math.Exp(logarithm), team));
            if (early is not { } found)
                return null;
            var reached = Math.Exp(found.Place);
            return new AuditAlternative("not equilibrated",
                FormattableString.Invariant($"The samples look like the law at time {reached:g4} after the case's start: the sampler had not reached equilibrium."), reached, found.Distance, found.Distance <= noise);
        }

        public AuditAlternative? Sampler(SplittingScheme scheme, string name)
        {
            if (!scheme.Traits.Dimensions.Contains(grid.Dimension))
                return null;
            // Up to half the stability limit by the largest curvature where probability is, or up to the case's own step where that is longer.
            var inspection = Inspection.Of(problem.Problem, grid, plan, 0);
            var longest = Math.Max(plan.Step, inspection.StableStep is { } stable ? 0.6 * stable : plan.Step * 10);
            var best = Minimise(Math.Log(longest / 200), Math.Log(longest), logarithm => LawOf(scheme, Math.Exp(logarithm)), coarse: 9, fine: 14);
            if (best is not { } found)
                return null;
            var step = Math.Exp(found.Place);
            return new AuditAlternative($"the law of {name} at a step",
                FormattableString.Invariant($"The samples follow the law that {name} has at a step of {step:g3}: the step is too long for the accuracy asked."), step, found.Distance, found.Distance <= noise);
        }

        private Density? LawOf(SplittingScheme scheme, double step)
        {
            var start = set.Time is null ? problem.Equilibrium : StartOnGrid.Create(problem.Problem.Start, grid);
            var steps = set.Time is { } time ? (int)Math.Max(1, Math.Round(time / step)) : StationarySteps;
            if (steps > 5000)
                return null;
            using var run = scheme.Begin(problem, start, team);
            for (var k = 0; k < steps; k++)
            {
                if (run.Advance(step).Failure is not null)
                    return null;
            }

            return run.Snapshot();
        }

        private Density? Law(Problem other, double? time)
        {
            try
            {
                return SamplerAudit.LawAt(new GridProblem(other, grid), time, team);
            }
            catch (InputException)
            {
                return null;
            }
        }

        // Scan, then golden section round the best place: the distance has one valley for each of these families in practice, and the scan guards against two.
        private (double Place, double Distance)? Minimise(double from, double to, Func<double, Density?> law, int coarse = 13, int fine = 22)
        {
            double Distance(double place)
            {
                cancellation.ThrowIfCancellationRequested();
                return law(place) is { } density && SampleDistance.Between(set.X, set.Y ?? [], density, team) is { } found ? found.Distance : double.PositiveInfinity;
            }

            var (best, least) = (from, double.PositiveInfinity);
            var width = (to - from) / (coarse - 1);
            for (var k = 0; k < coarse; k++)
            {
                var distance = Distance(from + k * width);
                if (distance < least)
                    (best, least) = (from + k * width, distance);
            }

            if (double.IsInfinity(least))
                return null;
            const double golden = 0.6180339887498949;
            var (low, high) = (Math.Max(from, best - width), Math.Min(to, best + width));
            var (a, b) = (high - golden * (high - low), low + golden * (high - low));
            var (atA, atB) = (Distance(a), Distance(b));
            for (var k = 0; k < fine; k++)
            {
                if (atA < atB)
                {
                    (high, b, atB) = (b, a, atA);
                    a = high - golden * (high - low);
                    atA = Distance(a);
                }
                else
                {
                    (low, a, atA) = (a, b, atB);
                    b = low + golden * (high - low);
                    atB = Distance(b);
                }
            }

            var (place, distanceThere) = atA < atB ? (a, atA) : (b, atB);
            return distanceThere < least ? (place, distanceThere) : (best, least);
        }
    }
}
