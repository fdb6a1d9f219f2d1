using System.CommandLine;
using System.Globalization;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Grids;
using FlowSolver.Studies;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver check</c>: reads a case and says what it understood.</summary>
internal static class CheckCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var path = SharedOptions.Case();
        var command = new Command("check", SharedOptions.WithExamples(
            "Reads a case and says what it understood: resolved values, step limits, tail mass at the walls, cost estimate, warnings. Computes nothing long.",
            "flowsolver check cases/two-well-trap.toml"))
        { path };
        command.SetAction(parsed => host.Guard(_ =>
        {
            var read = CaseFileReader.Read(parsed.GetValue(path)!);
            Print(host.Output, read, Inspection.Of(read.Problem, read.Grid, read.Plan, read.Samplers.Count > 0 ? read.Walkers : 0));
            return ExitStatus.Done;
        }));
        return command;
    }

    private static void Print(TextWriter output, CaseFile read, Inspection found)
    {
        var (problem, grid, plan) = (read.Problem, read.Grid, read.Plan);
        var (length, energy, time) = (Unit(read.Labels.Length), Unit(read.Labels.Energy), Unit(read.Labels.Time));
        void Line(string name, string text) => output.WriteLine($"  {name,-22}{text}");
        output.WriteLine(read.Title.Length > 0 ? read.Title : Path.GetFileName(read.Path));
        Line("equation", "∂ρ/∂t = M ∇·(ρ∇V + T∇ρ)");
        Line("V", problem.Potential.Description + (problem.Potential.IsSmooth ? "" : "   (with kinks or jumps)"));
        Line("T, M", Invariant($"{problem.Temperature}{energy}, {problem.Mobility}"));
        Line("x", AxisText(grid.X, length));
        if (grid.Y is not null)
            Line("y", AxisText(grid.Y, length));
        Line("start", problem.Start.Description);
        Line("time", Invariant($"to {plan.ReportTimes[^1]}{time} in {plan.TotalSteps} steps of {plan.Step}{time}; {plan.ReportTimes.Count} reports"));
        Line("flow methods", string.Join(", ", read.Methods));
        if (read.Samplers.Count > 0)
            Line("samplers", Invariant($"{string.Join(", ", read.Samplers)}; {read.Walkers} walkers, seed {read.Seed}"));
        output.WriteLine();
        output.WriteLine("Limits");
        Line("curvature of V", Invariant($"{found.LeastLiveCurvature:g4} to {found.LargestLiveCurvature:g4} where probability is; {found.LeastCurvature:g4} to {found.LargestCurvature:g4} on the whole domain"));
        Line("step × M × max V″", Invariant($"{found.StepTimesCurvature:g4} where probability is (explicit maps fold above 1, and are unstable from 2)"));
        Line("stable explicit step", found.StableStep is { } stable ? Invariant($"below {stable:g4}{time}") : "any");
        Line("unique JKO step", found.UniqueStep is { } unique ? Invariant($"below {unique:g4}{time}") : "any (V is convex where probability is)");
        Line("mass at the walls", Invariant($"{found.StartWallMass:g3} of the start, {found.EquilibriumWallMass:g3} of equilibrium"));
        Line("resolution", Invariant($"V changes by up to {found.CellContrast:g3} T between neighbouring cells where probability is"));
        output.WriteLine();
        output.WriteLine("Cost");
        Line("grid", Invariant($"{grid.CellCount:n0} cells, {found.CellSteps:g3} cell-steps for each stepping method"));
        if (found.WalkerSteps > 0)
            Line("walkers", Invariant($"{found.WalkerSteps:g3} walker-steps for each sampler"));
        var warnings = read.Warnings.Concat(found.Warnings).ToList();
        output.WriteLine();
        output.WriteLine(warnings.Count == 0 ? "No warnings." : "Warnings");
        foreach (var warning in warnings)
            output.WriteLine($"  - {warning}");
    }

    private static string AxisText(Axis axis, string unit) => Invariant(
        $"{axis.Interval.From} to {axis.Interval.To}{unit}, {axis.Cells} cells of {axis.Width:g4}{unit}, {(axis.IsPeriodic ? "periodic" : "reflecting walls")}");

    private static string Unit(string? unit) => string.IsNullOrEmpty(unit) ? "" : " " + unit;

    private static string Invariant(FormattableString text) => text.ToString(CultureInfo.InvariantCulture);
}
