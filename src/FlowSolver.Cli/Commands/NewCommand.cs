using System.CommandLine;
using FlowSolver.Cli.CaseFiles;
using FlowSolver.Foundation;

namespace FlowSolver.Cli.Commands;

/// <summary><c>flowsolver new</c>: writes a commented starter case.</summary>
internal static class NewCommand
{
    /// <summary>Builds the command.</summary>
    public static Command Create(CommandHost host)
    {
        var name = new Argument<string>("NAME") { Description = "Name of the new case; NAME.toml is written in the current directory." };
        var from = new Option<string?>("--from")
        {
            Description = $"Case of the gallery to start from: {string.Join(", ", CaseTemplates.Names)}. Default: {CaseTemplates.Default}.",
            HelpName = "GALLERYCASE",
        };
        var command = new Command("new", SharedOptions.WithExamples("Writes a commented starter case.", "flowsolver new my-trap --from ring")) { name, from };
        command.SetAction(parsed => host.Guard(_ =>
        {
            var wanted = parsed.GetValue(from) ?? CaseTemplates.Default;
            if (!CaseTemplates.Names.Contains(wanted))
            {
                var nearest = NearestName.Among(wanted, CaseTemplates.Names);
                throw new InputException(
                    $"There is no gallery case \"{wanted}\"{(nearest is null ? "" : $"; did you mean \"{nearest}\"?")} The gallery holds: {string.Join(", ", CaseTemplates.Names)}.");
            }

            var given = parsed.GetValue(name)!;
            var path = given.EndsWith(".toml", StringComparison.Ordinal) ? given : given + ".toml";
            if (Path.GetFileNameWithoutExtension(path).Length == 0 || path.IndexOfAny(Path.GetInvalidPathChars()) >= 0)
                throw new InputException($"The name \"{given}\" cannot be a file name; letters, digits and dashes will do.");
            try
            {
                using var stream = new FileStream(path, FileMode.CreateNew, FileAccess.Write);
                using var writer = new StreamWriter(stream);
                writer.Write(CaseTemplates.Text(wanted));
            }
            catch (IOException) when (File.Exists(path))
            {
                throw new InputException($"The file {path} exists already and is not overwritten. Choose another name.");
            }
            catch (DirectoryNotFoundException)
            {
                throw new InputException($"The directory of {path} does not exist. Create it first, or choose another name.");
            }

            host.Output.WriteLine($"Wrote {path}, starting from {wanted}. Next: flowsolver check {path}");
            return ExitStatus.Done;
        }));
        return command;
    }
}
