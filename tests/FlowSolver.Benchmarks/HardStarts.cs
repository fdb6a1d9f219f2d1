using System.Diagnostics;
using System.Globalization;
using System.Text;
using FlowSolver.Formulas;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Schemes.Jko;

namespace FlowSolver.Benchmarks;

/// <summary>
/// The table of hard starts for JKO steps in the plane: <c>-- hard-starts [FILE]</c> prints it, or writes it to a file such as
/// <c>tests/FlowSolver.Benchmarks/hard-starts.md</c>.
/// </summary>
internal static class HardStarts
{
    private sealed record Landscape(string Formula, double Temperature, double HalfX, double HalfY, double LongestStep);

    private static readonly Landscape Well = new("(x^2-1)^2 + 2*(y-x/2)^2", 0.3, 2.6, 2.6, 0.2);
    private static readonly Landscape Cold = new("(x^2-1)^2 + 2*(y-x/2)^2", 0.05, 2.2, 2.0, 0.2);
    private static readonly Landscape Quartic = new("x^4/4 + 25*y^4", 0.3, 3.0, 1.2, 0.3);
    private static readonly string[] Starts = ["two cells wide", "box", "two lumps", "at the wall"];

    /// <summary>Runs all cases.</summary>
    public static int Run(IReadOnlyList<string> arguments)
    {
        var text = new StringBuilder();
        text.AppendLine("# Hard starts for JKO steps in the plane").AppendLine()
            .AppendLine("Made by `dotnet run -c Release --project tests/FlowSolver.Benchmarks -- hard-starts FILE`; seconds depend on the machine, the rest does not.")
            .AppendLine("Gap: (primal − dual)/(W2²/(2τ)) of the step, signed; what quadrature leaves may be below 0. Products: Krylov products of all attempts.")
            .AppendLine("How: N Newton on the grid, C coarse convex problem then Newton where the grid resolves the map, S jumps spread over two cells, F gap above 10⁻².").AppendLine();
        Table(text, "Smooth start, double well x⁴/8 + y⁴/8 + quadratic at T = 0.5, τ = 0.02: the gap falls with the cells",
            new Landscape("(-0.5*x^2 + 0.6*x*y + y^2)/2 + 0.125*(x^4+y^4)", 0.5, 3.5, 3, 1), [64, 128, 256], ["smooth"], [0.02]);
        Table(text, "Box in the double well at T = 0.3, τ = 0.01: a jump, the gap falls with the cells", Well, [64, 128, 256], ["box"], [0.01]);
        foreach (var landscape in new[] { Well, Cold, Quartic })
        {
            double[] steps = [0.001, 0.01, 0.1, 0.3];
            Table(text, string.Create(CultureInfo.InvariantCulture, $"V = {landscape.Formula}, T = {landscape.Temperature}, 128² cells"),
                landscape, [128], Starts, [.. steps.Select(step => Math.Min(step, landscape.LongestStep)).Distinct()]);
        }

        if (arguments.Count > 0)
            File.WriteAllText(arguments[0], text.ToString());
        else
            Console.Write(text);
        return 0;
    }

    private static void Table(StringBuilder text, string title, Landscape landscape, int[] cellCounts, string[] starts, double[] steps)
    {
        text.Append("## ").AppendLine(title).AppendLine()
            .AppendLine("| start | cells | τ | gap, step 1 | products | s | how | gap, step 2 | products | s | how |")
            .AppendLine("|---|---|---|---|---|---|---|---|---|---|---|");
        using var team = new WorkerTeam(2);
        foreach (var start in starts)
        {
            foreach (var cells in cellCounts)
            {
                foreach (var step in steps)
                {
                    var domain = new Domain(new Interval(-landscape.HalfX, landscape.HalfX), new Interval(-landscape.HalfY, landscape.HalfY));
                    var grid = new Grid(new Axis(domain.X, cells), new Axis(domain.Y!, cells));
                    var density = StartOf(start, landscape, grid);
                    var problem = new Problem(new FormulaPotential(Formula.Parse(landscape.Formula, 2)), landscape.Temperature, domain, density);
                    using var run = new JkoScheme().Begin(new GridProblem(problem, grid), StartOnGrid.Create(density, grid), team);
                    text.Append(CultureInfo.InvariantCulture, $"| {start} | {cells}² | {step} |");
                    for (var k = 0; k < 2; k++)
                    {
                        var watch = Stopwatch.StartNew();
                        var report = run.Advance(step);
                        var how = (report.Warning?.Contains("coarse", StringComparison.Ordinal) == true ? "C" : "N")
                            + (report.Warning?.Contains("spread", StringComparison.Ordinal) == true ? "S" : "") + (report.Failure is null ? "" : "F");
                        text.Append(CultureInfo.InvariantCulture, $" {report.DualGap:0.0e+0} | {report.Iterations} | {watch.Elapsed.TotalSeconds:f2} | {how} |");
                    }

                    text.AppendLine();
                }
            }
        }

        text.AppendLine();
    }

    private static StartDensity StartOf(string name, Landscape landscape, Grid grid)
    {
        var (x, y) = (landscape.HalfX, landscape.HalfY);
        var width = 2 * grid.X.Width;
        var height = 2 * grid.Y!.Width;
        // Lumps as tall as the landscape is narrow.
        var lump = 0.06 * y;
        return name switch
        {
            "smooth" => new GaussianStart(-0.6, 0.16, 0.4, 0.2, 0.05),
            "two cells wide" => new GaussianStart(-0.7, width * width, -0.15 * y, height * height),
            "box" => new FunctionStart((u, v, value) =>
            {
                for (var i = 0; i < value.Length; i++)
                    value[i] = Math.Abs(u[i]) < 0.5 && Math.Abs(v[i]) < 0.3 * y ? 1 : 0;
            }, "box", IsSmooth: false),
            "two lumps" => new FunctionStart((u, v, value) =>
            {
                for (var i = 0; i < value.Length; i++)
                    value[i] = Lump(u[i] + 1.2, v[i] + 0.15 * y) + Lump(u[i] - 1.2, v[i] - 0.15 * y);
            }, "two lumps"),
            "at the wall" => new GaussianStart(-x + 0.1, 0.1, 0, 0.012 * y * y),
            _ => throw new ArgumentException($"The start was {name}; it must be one of the table's."),
        };

        double Lump(double u, double v) => Math.Exp(-0.5 * (u * u / 0.02 + v * v / (lump * lump)));
    }
}
