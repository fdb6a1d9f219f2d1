using System.Globalization;
using System.Text;
using FlowSolver.Ensembles;
using FlowSolver.Formulas;
using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Reporting;
using FlowSolver.Reporting.Samples;

namespace FlowSolver.Cli.CaseFiles;

/// <summary>
/// Reads a case file. All faults are found before anything is refused, and limits (<see cref="CaseLimits"/>) are checked before memory is taken.
/// </summary>
public static class CaseFileReader
{
    /// <summary>Reads a case file.</summary>
    /// <param name="path">The file.</param>
    /// <param name="catalogue">Names of methods and samplers; the library's when null.</param>
    /// <exception cref="InputException">The file cannot be used; one fault for everything that is wrong with it, in the order of the file.</exception>
    public static CaseFile Read(string path, MethodCatalogue? catalogue = null)
    {
        ArgumentNullException.ThrowIfNull(path);
        try
        {
            if (Directory.Exists(path))
                throw new InputException(new InputFault("The case was a directory; it must be a TOML file.", "Name a file, such as cases/two-well-trap.toml.", path));
            if (!File.Exists(path))
                throw new InputException(new InputFault("The case file does not exist.", "Write a starter case with: flowsolver new NAME", path));
            var length = new FileInfo(path).Length;
            if (length > CaseLimits.FileSize.Most)
            {
                throw new InputException(new InputFault(string.Create(
                    CultureInfo.InvariantCulture, $"The case file had {length} bytes; it must have at most {CaseLimits.FileSize.Most}."), "Put data into a file of samples.", path));
            }

            var bytes = File.ReadAllBytes(path);
            string text;
            try
            {
                text = new UTF8Encoding(false, throwOnInvalidBytes: true).GetString(bytes);
            }
            catch (DecoderFallbackException exception)
            {
                throw new InputException(new InputFault(string.Create(
                    CultureInfo.InvariantCulture, $"Byte {exception.Index} is not UTF-8 text; a case file must be UTF-8."), "Save it as UTF-8.", path));
            }

            return Parse(text.TrimStart('\uFEFF'), path, catalogue);
        }
        catch (Exception exception) when (exception is IOException or UnauthorizedAccessException or NotSupportedException)
        {
            throw new InputException(new InputFault($"The case file could not be read: {exception.Message}", File: path));
        }
    }

    /// <summary>Reads the text of a case file.</summary>
    /// <param name="text">The text.</param>
    /// <param name="path">The file's name for messages; files of samples are looked for beside it.</param>
    /// <param name="catalogue">Names of methods and samplers; the library's when null.</param>
    /// <exception cref="InputException">The text cannot be used; one fault for everything that is wrong with it, in the order of the file.</exception>
    public static CaseFile Parse(string text, string path, MethodCatalogue? catalogue = null)
    {
        ArgumentNullException.ThrowIfNull(text);
        ArgumentNullException.ThrowIfNull(path);
        if (text.Length > CaseLimits.FileSize.Most)
        {
            throw new InputException(new InputFault(string.Create(
                CultureInfo.InvariantCulture, $"The case had {text.Length} characters; it must have at most {CaseLimits.FileSize.Most}."), File: path));
        }

        var faults = new List<InputFault>();
        var root = CaseTree.Parse(text, path, faults);
        var result = root is null ? null : new Builder(new CaseValues(root, path, faults), path, catalogue ?? MethodCatalogue.OfLibrary, faults).Build();
        if (faults.Count == 0 && result is not null)
            return result;
        // In the order of the case file; what other files are at fault for comes last.
        throw new InputException([.. faults.OrderBy(fault => fault.File == path ? fault.Line ?? 0 : int.MaxValue)]);
    }

    /// <summary>Turns checked values into a problem; each part is tried even when another one failed, so that all faults are found at once.</summary>
    private sealed class Builder(CaseValues values, string path, MethodCatalogue catalogue, List<InputFault> faults)
    {
        // Lattice points along an axis in two dimensions when formulas are looked at: enough for a first look; the grid itself is checked before a run.
        private const int MostLatticePoints = 1025;

        private readonly List<string> warnings = [];
        private readonly HashSet<string> usedConstants = [];
        private readonly int dimension = values.IsGiven("domain.y") ? 2 : 1;

        public CaseFile? Build()
        {
            var grid = Grid();
            var domain = grid is null ? null : new Domain(grid.X.Interval, grid.Y?.Interval);
            var constants = Constants();
            var potential = Potential(constants, domain, grid);
            var start = Start(constants, domain, grid);
            var plan = Plan();
            var methods = Methods();
            var samplerOptions = SamplerOptions();
            if (constants is not null && potential is not null && start is not null)
            {
                foreach (var name in constants.Keys.Where(name => !usedConstants.Contains(name)))
                    warnings.Add($"The constant {name} is not used by any formula.");
            }

            if (faults.Count > 0 || grid is null || domain is null || potential is null || start is null || plan is null)
                return null;
            var problem = new Problem(potential, values.Number("energy.temperature")!.Value, domain, start, values.Number("energy.mobility")!.Value, values.Text("title")!);
            var resolved = new ResolvedCase(values, plan);
            return new CaseFile
            {
                Path = path,
                Name = System.IO.Path.GetFileNameWithoutExtension(path),
                Title = problem.Title,
                Problem = problem,
                Grid = grid,
                Plan = plan,
                Methods = methods.Flows,
                Samplers = methods.Samplers,
                Walkers = (int)values.Whole("ensemble.walkers")!.Value,
                Seed = (ulong)values.Whole("ensemble.seed")!.Value,
                SamplerOptions = samplerOptions,
                Labels = new CaseLabels(values.Text("labels.length"), values.Text("labels.energy"), values.Text("labels.time")),
                Tolerances = new CaseTolerances(values.Number("tolerances.dual_gap")!.Value),
                ResolvedText = resolved.ToText(),
                ResolvedValues = resolved.ToJson(),
                Warnings = warnings,
            };
        }

        private SamplerOptions SamplerOptions()
        {
            const string biasKey = "ensemble.gradient_bias";
            const string exponentKey = "ensemble.decrease_exponent";
            var bias = values.Find(biasKey) as double[] ?? new double[dimension];
            if (bias.Length != dimension)
                values.Fault(biasKey, CountMessage(bias.Length));
            var exponent = values.Number(exponentKey) ?? 0.5;
            if (exponent > 1)
                values.Fault(exponentKey, string.Create(CultureInfo.InvariantCulture, $"The value was {exponent}; it must be at most 1."));
            return new SamplerOptions
            {
                GradientBiasX = bias.Length > 0 ? bias[0] : 0,
                GradientBiasY = bias.Length > 1 ? bias[1] : 0,
                GradientVariance = values.Number("ensemble.gradient_variance") ?? 1,
                StepsBeforeDecrease = values.Number("ensemble.decrease_after") ?? 10,
                DecreaseExponent = exponent,
            };
        }

        private Grid? Grid()
        {
            var x = Axis("x");
            var y = dimension == 2 ? Axis("y") : null;
            if (x is null || (dimension == 2 && y is null))
                return null;
            return new Grid(x, y);
        }

        private Axis? Axis(string name)
        {
            var prefix = "domain." + name;
            var from = values.Number(prefix + ".from");
            var to = values.Number(prefix + ".to");
            var cells = values.Whole(prefix + ".cells");
            var isRight = true;
            if (from is { } low && to is { } high)
            {
                if (!(high > low))
                {
                    values.Fault(prefix + ".to", string.Create(CultureInfo.InvariantCulture, $"It was {high}; it must be above from, which is {low}."));
                    isRight = false;
                }
                else if (!double.IsFinite(high - low) || (high - low) / (cells ?? 4) <= 1e-12 * Math.Max(Math.Abs(low), Math.Abs(high)))
                {
                    values.Fault(prefix + ".to", string.Create(
                        CultureInfo.InvariantCulture, $"The axis from {low} to {high} cannot be cut into cells; its length must be finite and its cells wider than rounding."), "Move the origin or change the unit of length.");
                    isRight = false;
                }
            }

            if (cells > CaseLimits.CellsPerAxis.Most && dimension == 2)
            {
                values.Fault(prefix + ".cells", string.Create(
                    CultureInfo.InvariantCulture, $"It was {cells}; in two dimensions it must be at most {CaseLimits.CellsPerAxis.Most}."));
                isRight = false;
            }

            if (!isRight || from is null || to is null || cells is null || values.Text(prefix + ".ends") is not { } ends)
                return null;
            if (cells % 2 != 0 || cells < 8)
                warnings.Add(string.Create(CultureInfo.InvariantCulture, $"The axis {name} has {cells} cells: only an even number from 8 on lets the grid error be estimated by halving."));
            return new Axis(new Interval(from.Value, to.Value, ends == "periodic" ? AxisEnds.Periodic : AxisEnds.Reflecting), (int)cells.Value);
        }

        private Dictionary<string, double>? Constants()
        {
            if (values.Find("energy.constants") is not Dictionary<string, double> constants)
                return null;
            var isRight = true;
            foreach (var (name, line) in values.NamesOf("energy.constants"))
            {
                if (FormulaLanguage.IsConstantName(name))
                    continue;
                var shown = name.Length > 30 ? name[..27] + "..." : name.ReplaceLineEndings(" ");
                values.Fault("energy.constants", FormulaLanguage.IsReserved(name)
                    ? $"A constant was called {shown}, which is a word of formulas; it must have another name."
                    : $"A constant was called \"{shown}\"; its name must be a letter, then letters, digits or underscores.", line: line);
                isRight = false;
            }

            return isRight ? constants : null;
        }

        private Formula? Formula(string key, Dictionary<string, double>? constants)
        {
            if (values.Text(key) is not { } text)
                return null;
            // Constants that are themselves at fault would only make names unknown here.
            if (constants is null)
                return null;
            try
            {
                var formula = Formulas.Formula.Parse(text, dimension, constants);
                usedConstants.UnionWith(formula.Constants);
                return formula;
            }
            catch (InputException exception)
            {
                AddAll(exception, key);
                return null;
            }
        }

        private FormulaPotential? Potential(Dictionary<string, double>? constants, Domain? domain, Grid? grid)
        {
            const string key = "energy.potential";
            if (Formula(key, constants) is not { } formula)
                return null;
            try
            {
                var potential = new FormulaPotential(formula);
                if (domain is null || grid is null)
                    return potential;
                var (pointsX, pointsY) = Lattice(grid);
                FormulaCheck.RequireFinite(formula, "The potential", domain, pointsX, pointsY);
                FormulaCheck.RequireSlope(potential, domain, pointsX, pointsY);
                WarnAtSeams(formula, domain);
                return potential;
            }
            catch (InputException exception)
            {
                AddAll(exception, key);
                return null;
            }
        }

        /// <summary>A potential on a circle has to come back to itself.</summary>
        private void WarnAtSeams(Formula formula, Domain domain)
        {
            foreach (var (axis, name) in new[] { (domain.X, "x"), (domain.Y, "y") })
            {
                if (axis is not { Ends: AxisEnds.Periodic })
                    continue;
                var (jump, scale) = (0.0, 0.0);
                for (var i = 0; i <= 16; i++)
                {
                    var (first, last) = (0.0, 0.0);
                    if (name == "x")
                    {
                        var across = domain.Y is null ? 0 : domain.Y.From + domain.Y.Length * (i / 16.0);
                        (first, last) = (formula.ValueAt(axis.From, across), formula.ValueAt(axis.To, across));
                    }
                    else
                    {
                        var across = domain.X.From + domain.X.Length * (i / 16.0);
                        (first, last) = (formula.ValueAt(across, axis.From), formula.ValueAt(across, axis.To));
                    }

                    jump = Math.Max(jump, Math.Abs(last - first));
                    scale = Math.Max(scale, Math.Max(Math.Abs(first), Math.Abs(last)));
                }

                if (jump > 1e-9 * Math.Max(scale, 1))
                    warnings.Add(string.Create(CultureInfo.InvariantCulture, $"The potential differs by up to {jump:g4} between the two ends of the periodic axis {name}: it has a jump there."));
            }
        }

        private StartDensity? Start(Dictionary<string, double>? constants, Domain? domain, Grid? grid)
        {
            if (values.IsGiven("start.density"))
                return FormulaStart(constants, domain, grid);
            if (values.IsGiven("start.gaussian"))
                return GaussianStart(grid);
            if (values.IsGiven("start.samples"))
                return SamplesStart(domain);
            if (values.IsGiven("start"))
                values.Fault("start", "No start was given; it must have exactly one of density, gaussian and samples.", "For example: gaussian = { mean = [-1.0], deviation = [0.2] }");
            return null;
        }

        private FunctionStart? FormulaStart(Dictionary<string, double>? constants, Domain? domain, Grid? grid)
        {
            const string key = "start.density";
            if (Formula(key, constants) is not { } formula)
                return null;
            try
            {
                if (domain is not null && grid is not null)
                {
                    var (pointsX, pointsY) = Lattice(grid);
                    FormulaCheck.RequireFinite(formula, "The start density", domain, pointsX, pointsY, mayBeNegative: false);
                    if (formula.AsConstant() == 0)
                        values.Fault(key, "The start density is 0 everywhere; it must be above 0 somewhere.");
                }

                return new FunctionStart(formula.Value, formula.Text, formula.IsSmooth);
            }
            catch (InputException exception)
            {
                AddAll(exception, key);
                return null;
            }
        }

        private GaussianStart? GaussianStart(Grid? grid)
        {
            const string meanKey = "start.gaussian.mean";
            const string deviationKey = "start.gaussian.deviation";
            const string covarianceKey = "start.gaussian.covariance";
            var mean = values.Find(meanKey) as double[];
            if (mean is not null && mean.Length != dimension)
            {
                values.Fault(meanKey, CountMessage(mean.Length));
                mean = null;
            }

            double varianceX = 0, varianceY = 0, covariance = 0;
            var hasWidth = false;
            if (values.Find(deviationKey) is double[] deviation)
            {
                if (deviation.Length != dimension)
                    values.Fault(deviationKey, CountMessage(deviation.Length));
                else if (Array.FindIndex(deviation, one => !(one > 0) || !double.IsNormal(one * one)) is var bad and >= 0)
                    values.Fault(deviationKey, string.Create(CultureInfo.InvariantCulture, $"Entry {bad + 1} was {deviation[bad]}; a deviation must be above 0 and its square a number."));
                else
                    (varianceX, varianceY, hasWidth) = (deviation[0] * deviation[0], dimension == 2 ? deviation[1] * deviation[1] : 0, true);
            }
            else if (values.Find(covarianceKey) is double[][] matrix)
            {
                hasWidth = Covariance(covarianceKey, matrix, out varianceX, out varianceY, out covariance);
            }
            else if (!values.IsGiven(deviationKey) && !values.IsGiven(covarianceKey))
            {
                values.Fault("start.gaussian", "No width was given; it must have deviation or covariance.", "For example: deviation = [0.2]");
            }

            if (mean is null || !hasWidth)
                return null;
            if (grid is not null)
            {
                CheckInside(meanKey, "x", mean[0], Math.Sqrt(varianceX), grid.X);
                if (grid.Y is not null)
                    CheckInside(meanKey, "y", mean[1], Math.Sqrt(varianceY), grid.Y);
            }

            return dimension == 1 ? new GaussianStart(mean[0], varianceX) : new GaussianStart(mean[0], varianceX, mean[1], varianceY, covariance);
        }

        private bool Covariance(string key, double[][] matrix, out double varianceX, out double varianceY, out double covariance)
        {
            (varianceX, varianceY, covariance) = (0, 0, 0);
            if (matrix.Length != dimension || Array.Exists(matrix, row => row.Length != dimension))
            {
                values.Fault(key, $"It was a matrix of another shape; it must have {dimension} row{(dimension == 1 ? "" : "s")} of {dimension}, one for each axis of the domain.");
                return false;
            }

            varianceX = matrix[0][0];
            if (dimension == 1)
            {
                if (varianceX > 0)
                    return true;
                values.Fault(key, string.Create(CultureInfo.InvariantCulture, $"The variance was {varianceX}; it must be above 0."));
                return false;
            }

            (covariance, varianceY) = (matrix[0][1], matrix[1][1]);
            if (matrix[1][0] != covariance)
            {
                values.Fault(key, string.Create(
                    CultureInfo.InvariantCulture, $"The matrix was not symmetric: its off-diagonal entries were {covariance} and {matrix[1][0]}; they must be equal."));
                return false;
            }

            if (varianceX > 0 && varianceY > 0 && Math.Abs(covariance) < Math.Sqrt(varianceX) * Math.Sqrt(varianceY) * (1 - 1e-12))
                return true;
            values.Fault(key, string.Create(
                CultureInfo.InvariantCulture, $"The matrix [[{varianceX}, {covariance}], [{covariance}, {varianceY}]] was not positive definite; its variances must be above 0 and the covariance below the product of the deviations."));
            return false;
        }

        private void CheckInside(string key, string name, double mean, double deviation, Axis axis)
        {
            var interval = axis.Interval;
            if (interval.Ends == AxisEnds.Reflecting)
            {
                var outside = Math.Max(interval.From - mean, mean - interval.To);
                if (outside > 8 * deviation)
                {
                    values.Fault(key, string.Create(
                        CultureInfo.InvariantCulture, $"The mean of {name} was {mean}, with hardly any of the density on the axis from {interval.From} to {interval.To}; it must lie inside."));
                }
                else if (-outside < 4 * deviation)
                {
                    warnings.Add($"The start reaches over a wall of the axis {name}: what lies outside is cut off and the rest normalised.");
                }
            }

            if (deviation < axis.Width)
                warnings.Add($"The start is narrower than a cell of the axis {name}: on the grid it is as wide as a cell.");
        }

        private SamplesStart? SamplesStart(Domain? domain)
        {
            const string key = "start.samples";
            if (values.Text(key) is not { } name)
                return null;
            if (string.IsNullOrWhiteSpace(name) || name.Contains('\0', StringComparison.Ordinal))
            {
                values.Fault(key, "The name of the file was empty; it must name a file of samples.");
                return null;
            }

            var file = System.IO.Path.Combine(System.IO.Path.GetDirectoryName(path) ?? "", name);
            if (!File.Exists(file))
            {
                values.Fault(key, $"The file {file} does not exist; it must be a CSV, .npy or HDF5 file beside the case.");
                return null;
            }

            try
            {
                var set = SamplesReader.Read(file, dimension);
                if (set.Time is { } time && Array.FindIndex(time, one => one != time[0]) is var other and >= 0)
                {
                    values.Fault(key, string.Create(
                        CultureInfo.InvariantCulture, $"The samples were of several times, such as {time[0]} and {time[other]}; a start must be of one."), "Keep the rows of one time.");
                    return null;
                }

                return domain is null || CountInside(set, domain, key) ? new SamplesStart(set.X, set.Y, name) : null;
            }
            catch (InputException exception)
            {
                foreach (var fault in exception.Faults)
                    faults.Add(fault with { Key = key });
                return null;
            }
        }

        private bool CountInside(SampleSet set, Domain domain, string key)
        {
            var outside = 0;
            for (var i = 0; i < set.Count; i++)
            {
                if ((domain.X.Ends == AxisEnds.Reflecting && !domain.X.Contains(set.X[i]))
                    || (domain.Y is { Ends: AxisEnds.Reflecting } y && set.Y is not null && !y.Contains(set.Y[i])))
                {
                    outside++;
                }
            }

            if (outside == set.Count)
            {
                values.Fault(key, "All samples lie outside the domain; some must lie inside.", "Are they in the same unit of length?");
                return false;
            }

            if (outside > 0)
                warnings.Add(string.Create(CultureInfo.InvariantCulture, $"{outside} of {set.Count} start samples lie outside the domain and are left out."));
            return true;
        }

        private TimePlan? Plan()
        {
            var step = values.Number("time.step");
            var until = values.Number("time.until");
            double[] times;
            if (values.IsGiven("time.at"))
            {
                if (values.Find("time.at") is not double[] at || !CheckTimes(at, until))
                    return null;
                times = until > at[^1] ? [.. at, until.Value] : at;
                if (times[^1] <= 0)
                {
                    values.Fault("time.at", "The only time was 0; the last time must be above 0.");
                    return null;
                }
            }
            else
            {
                if (until is null)
                {
                    if (values.IsGiven("time") && !values.IsGiven("time.until"))
                        values.Fault("time.until", "The key was not given; it must be a number above 0, or time.at must list the times.", "For example: until = 3.0");
                    return null;
                }

                if (values.Whole("time.reports") is not { } reports)
                    return null;
                times = new double[reports];
                for (var i = 0; i < times.Length; i++)
                    times[i] = i == times.Length - 1 ? until.Value : until.Value * ((double)i / (times.Length - 1));
                if (times[1] <= 0)
                {
                    values.Fault("time.until", string.Create(CultureInfo.InvariantCulture, $"It was {until}; the times between its reports must be apart."));
                    return null;
                }
            }

            if (step is null || !CheckSteps(step.Value, times))
                return null;
            var plan = new TimePlan(step.Value, times);
            if (!plan.IsUniform)
                warnings.Add("The reports do not all lie on whole steps: steps are shortened so that each report is met.");
            return plan;
        }

        private bool CheckTimes(double[] at, double? until)
        {
            if (at.Length > CaseLimits.Reports.Most)
            {
                values.Fault("time.at", string.Create(CultureInfo.InvariantCulture, $"It listed {at.Length} times; it must list at most {CaseLimits.Reports.Most}."));
                return false;
            }

            for (var i = 0; i < at.Length; i++)
            {
                if (at[i] < 0 || (i > 0 && at[i] <= at[i - 1]))
                {
                    values.Fault("time.at", string.Create(
                        CultureInfo.InvariantCulture, $"Entry {i + 1} was {at[i]}{(at[i] < 0 ? "" : $" after {at[i - 1]}")}; times must be increasing and none below 0."));
                    return false;
                }
            }

            if (until < at[^1])
            {
                values.Fault("time.at", string.Create(CultureInfo.InvariantCulture, $"The last time was {at[^1]}, after until, which is {until}; it must not be later."));
                return false;
            }

            return true;
        }

        /// <summary>Counts steps in floating point first: a step that is far too small must not overflow a counter.</summary>
        private bool CheckSteps(double step, double[] times)
        {
            var steps = 0.0;
            for (var i = 0; i < times.Length; i++)
                steps += Math.Ceiling((times[i] - (i == 0 ? 0 : times[i - 1])) / step * (1 - 1e-9));
            if (steps <= CaseLimits.Steps.Most)
                return true;
            values.Fault("time.step", string.Create(
                CultureInfo.InvariantCulture, $"With a step of {step} there would be {steps:g6} steps; there must be at most {CaseLimits.Steps.Most}."), "Make the step longer or the time shorter.");
            return false;
        }

        private (string[] Flows, string[] Samplers) Methods()
        {
            var flows = values.Find("methods.flow") as string[] ?? [];
            var samplers = values.Find("ensemble.samplers") as string[] ?? [];
            foreach (var flow in flows)
            {
                if (!catalogue.Flows.Contains(flow))
                {
                    Unknown("methods.flow", "method", flow, catalogue.Flows, catalogue.Samplers.Contains(flow) ? "It is a sampler: name it under ensemble.samplers." : null);
                }
                else if (!catalogue.FlowDimensions(flow).Contains(dimension))
                {
                    var serving = catalogue.Flows.Where(name => catalogue.FlowDimensions(name).Contains(dimension));
                    values.Fault("methods.flow", $"The method {flow} does not serve {(dimension == 1 ? "one dimension" : "two dimensions")}; it must be one that does.",
                        $"Those are {string.Join(", ", serving)}.");
                }
            }

            foreach (var sampler in samplers)
            {
                if (!catalogue.Samplers.Contains(sampler))
                    Unknown("ensemble.samplers", "sampler", sampler, catalogue.Samplers, catalogue.Flows.Contains(sampler) ? "It is a flow method: name it under methods.flow." : null);
            }

            if (flows.Length == 0 && samplers.Length == 0 && values.Find("methods.flow") is not null && values.Find("ensemble.samplers") is not null)
                values.Fault("methods.flow", "No method and no sampler was named; there must be at least one.", "For example: flow = [\"exact\", \"jko\"]");
            return (flows, samplers);
        }

        private void Unknown(string key, string what, string found, IReadOnlyList<string> known, string? remedy)
        {
            var shown = found.Length > 40 ? found[..37] + "..." : found;
            remedy ??= NearestName.Among(found, known) is { } nearest ? $"Did you mean \"{nearest}\"?" : $"The {what}s are {string.Join(", ", known)}.";
            values.Fault(key, $"The {what} \"{shown.ReplaceLineEndings(" ")}\" is not known.", remedy);
        }

        private string CountMessage(int found) => string.Create(
            CultureInfo.InvariantCulture, $"It had {found} number{(found == 1 ? "" : "s")}; it must have {dimension}, one for each axis of the domain.");

        private static (int X, int Y) Lattice(Grid grid)
            => grid.Y is null ? (2 * grid.Nx + 1, 2) : (Math.Min(2 * grid.Nx + 1, MostLatticePoints), Math.Min(2 * grid.Ny + 1, MostLatticePoints));

        /// <summary>Takes over the faults of a formula, with their place in the file.</summary>
        private void AddAll(InputException exception, string key)
        {
            var item = values.Item(key);
            foreach (var fault in exception.Faults)
            {
                var column = item is { IsPlainText: true } && fault.Column is { } inside ? item.Column + inside : item?.Column;
                faults.Add(fault with { File = path, Line = item?.Line ?? values.LineOf(key), Column = column, Key = key });
            }
        }
    }
}
