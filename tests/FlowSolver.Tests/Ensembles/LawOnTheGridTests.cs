using FlowSolver.Diagnostics;
using FlowSolver.Ensembles;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Tests.Support;
using FlowSolver.Transport;

namespace FlowSolver.Tests.Ensembles;

/// <summary>
/// Every sampler that has a law on the grid agrees with it to sampling noise, over time, for smooth and kinked V: two programs that share nothing but the recipe.
/// Mutation tried: the temperature of NoisyGradientScheme without the error's variance; the row of ula-noisy-gradient failed.
/// </summary>
public class LawOnTheGridTests
{
    private static readonly SamplerOptions Options = new() { GradientBiasX = 0.3, GradientBiasY = -0.2, GradientVariance = 3, StepsBeforeDecrease = 2 };

    public static TheoryData<string, string> Cases
    {
        get
        {
            var cases = new TheoryData<string, string>();
            foreach (var sampler in SamplerCatalogue.All.Where(sampler => sampler.Traits.Law is not null))
            {
                foreach (var problem in new[] { "well", "circle", "kink", "plane" })
                    cases.Add(sampler.Traits.Name, problem);
                // Where the noise comes last: otherwise walkers rest on the kinks themselves, which a Kolmogorov distance to cells does not forgive.
                if (sampler is RecipeSampler { Recipe: var recipe } && recipe.Parts[^1].Map is null)
                    cases.Add(sampler.Traits.Name, "kinked plane");
            }

            return cases;
        }
    }

    private static Problem Make(string name) => name switch
    {
        "well" => new Problem(new PolynomialPotential(0, 0.1, -0.5, 0, 0.25), 0.4, new Domain(new Interval(-3, 3)), new GaussianStart(-0.5, 0.2), 1.2),
        "circle" => new Problem(
            FormulaPotential.Parse("cos(x) + 0.4*sin(2*x)", 1), 0.5, new Domain(new Interval(0, 2 * Math.PI, AxisEnds.Periodic)), new GaussianStart(1, 0.3)),
        "kink" => new Problem(new AbsolutePotential(1), 0.5, new Domain(new Interval(-4, 4)), new GaussianStart(0.7, 0.1)),
        "kinked plane" => new Problem(
            FormulaPotential.Parse("abs(x) + 0.5*abs(y-0.25) + x^2/5 + y^2/4", 2), 0.5, new Domain(new Interval(-3, 3), new Interval(-3, 3)), new GaussianStart(0.4, 0.1, -0.2, 0.15)),
        _ => new Problem(new PlanePotential(-0.5, 0.3, 1, 0.5), 0.5, new Domain(new Interval(-3.5, 3.5), new Interval(-3, 3)), new GaussianStart(-0.6, 0.16, 0.4, 0.2, 0.05)),
    };

    [Theory]
    [MemberData(nameof(Cases))]
    public void Ensemble_AgainstItsLaw_DiffersByNoiseOnly(string name, string problemName)
    {
        // An explicit step jumps over the kink of |x| in a way whose law is rough: the recipe is followed all the same.
        var problem = Make(problemName);
        var plane = problem.Dimension == 2;
        var cells = plane ? 96 : 512;
        var grid = new Grid(new Axis(problem.Domain.X, cells), problem.Domain.Y is null ? null : new Axis(problem.Domain.Y, cells));
        var sampler = SamplerCatalogue.Find(name, Options)!;
        const int walkers = 100_000;
        var run = sampler.Begin(problem, walkers, 41, WorkerTeam.Alone);
        using var law = sampler.Traits.Law!.Begin(new GridProblem(problem, grid), StartOnGrid.Create(problem.Start, grid), WorkerTeam.Alone);
        for (var k = 1; k <= 8; k++)
        {
            Assert.Null(run.Advance(0.12).Failure);
            Assert.Null(law.Advance(0.12).Failure);
            if (k is not (1 or 3 or 8))
                continue;
            var density = law.Snapshot();
            if (!plane)
            {
                var floor = NoiseFloor.Simulate(density, walkers, 99, 5, WorkerTeam.Alone)!;
                var distance = SampleDistance.Between(run.X, [], density, WorkerTeam.Alone)!.Value.Distance;
                // The largest of 99 simulated distances, with a quarter of the cell's own width for what the cells blur.
                Assert.True(distance <= floor.Distances[^1] + 0.05 * grid.X.Width, $"{name} at step {k}: {distance:g4} against {floor.Mean:g4}, {floor.Percentile95:g4}");
                continue;
            }

            Assert.InRange(SampleStatistics.Kolmogorov(run.X, Marginal(density, true)), 0.3, 1.95);
            Assert.InRange(SampleStatistics.Kolmogorov(run.Y, Marginal(density, false)), 0.3, 1.95);
            var expected = Product(density);
            double mean = 0, square = 0;
            for (var i = 0; i < walkers; i++)
            {
                var product = run.X[i] * run.Y[i];
                mean += product / walkers;
                square += product * product / walkers;
            }

            Assert.InRange((mean - expected) / Math.Sqrt((square - mean * mean) / walkers), -4, 4);
        }
    }

    private static Func<double, double> Marginal(Density density, bool alongX)
    {
        var grid = density.Grid;
        var axis = alongX ? grid.X : grid.Y!;
        var cumulative = new double[axis.Cells + 1];
        for (var row = 0; row < grid.Ny; row++)
        {
            for (var i = 0; i < grid.Nx; i++)
                cumulative[(alongX ? i : row) + 1] += density.Values[row * grid.Nx + i] * grid.CellVolume;
        }

        for (var i = 0; i < axis.Cells; i++)
            cumulative[i + 1] += cumulative[i];
        return position =>
        {
            var place = Math.Clamp((position - axis.Interval.From) / axis.Width, 0, axis.Cells);
            var cell = Math.Min((int)place, axis.Cells - 1);
            // Parabolas through the edges of three cells: straight lines would show at this number of walkers.
            if (cell == 0 || cell >= axis.Cells - 1)
                return cumulative[cell] + (place - cell) * (cumulative[cell + 1] - cumulative[cell]);
            var t = place - cell;
            var (before, own, after) = (cumulative[cell] - cumulative[cell - 1], cumulative[cell + 1] - cumulative[cell], cumulative[cell + 2] - cumulative[cell + 1]);
            return cumulative[cell] + t * own + t * (t - 1) * 0.25 * (after - before);
        };
    }

    private static double Product(Density density)
    {
        var grid = density.Grid;
        var sum = 0.0;
        for (var row = 0; row < grid.Ny; row++)
        {
            for (var i = 0; i < grid.Nx; i++)
                sum += density.Values[row * grid.Nx + i] * grid.X.Center(i) * grid.Y!.Center(row) * grid.CellVolume;
        }

        return sum;
    }
}
