using System.Runtime.InteropServices;
using FlowSolver.Foundation;

namespace FlowSolver.Cli;

/// <summary>
/// What every command shares: its writers, the answer to an interrupt, and the one place where faults become sentences and exit statuses.
/// </summary>
internal sealed class CommandHost(TextWriter output, TextWriter error)
{
    /// <summary>Results.</summary>
    public TextWriter Output { get; } = output;

    /// <summary>Progress and faults.</summary>
    public TextWriter Error { get; } = error;

    /// <summary>
    /// Runs a command's work. The token is cancelled by the first interrupt (Ctrl-C) or termination signal; a second interrupt ends the process at once.
    /// </summary>
    /// <returns>The exit status.</returns>
    public int Guard(Func<CancellationToken, int> work)
    {
        using var source = new CancellationTokenSource();
        void Stop(PosixSignalContext context)
        {
            if (source.IsCancellationRequested)
                return;
            context.Cancel = true;
            source.Cancel();
        }

        using var interrupt = PosixSignalRegistration.Create(PosixSignal.SIGINT, Stop);
        using var terminate = PosixSignalRegistration.Create(PosixSignal.SIGTERM, Stop);
        try
        {
            return work(source.Token);
        }
        catch (InputException exception)
        {
            foreach (var fault in exception.Faults)
                Error.WriteLine($"flowsolver: {fault}");
            return ExitStatus.BadInput;
        }
        catch (OperationCanceledException)
        {
            Error.WriteLine("flowsolver: interrupted before anything was finished; nothing was written.");
            return ExitStatus.Interrupted;
        }
        catch (Exception exception) when (exception is IOException or UnauthorizedAccessException)
        {
            Error.WriteLine($"flowsolver: the result could not be written: {exception.Message} Nothing was left in its place.");
            return ExitStatus.NotTrusted;
        }
        catch (OutOfMemoryException)
        {
            Error.WriteLine("flowsolver: memory ran out; fewer cells, walkers or reports would do. Nothing was written.");
            return ExitStatus.NotTrusted;
        }
        catch (Exception exception) when (Environment.GetEnvironmentVariable("FLOWSOLVER_TRACE") != "1")
        {
            Error.WriteLine($"flowsolver: stopped by a fault of its own ({exception.GetType().Name}: {exception.Message}). Set FLOWSOLVER_TRACE=1 and run again to see where. Nothing was written.");
            return ExitStatus.NotTrusted;
        }
    }
}
