namespace FlowSolver.Cli;

/// <summary>What the command's exit status means.</summary>
internal static class ExitStatus
{
    /// <summary>Done.</summary>
    public const int Done = 0;

    /// <summary>The input is at fault; nothing was left behind.</summary>
    public const int BadInput = 2;

    /// <summary>The computation could not be trusted, did not converge, or could not be written; what it had is kept and marked.</summary>
    public const int NotTrusted = 3;

    /// <summary>An audit's verdict is "differs".</summary>
    public const int Differs = 4;

    /// <summary>Interrupted.</summary>
    public const int Interrupted = 130;
}
