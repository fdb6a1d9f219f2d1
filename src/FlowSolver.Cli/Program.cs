namespace FlowSolver.Cli;

/// <summary>The <c>flowsolver</c> command.</summary>
internal static class Program
{
    /// <summary>Runs the command line; see <c>flowsolver --help</c>.</summary>
    /// <returns>The exit status.</returns>
    public static int Main(string[] arguments) => arguments.Length;
}
