namespace FlowSolver.Formulas;

/// <summary>A place where a formula's slope or value jumps.</summary>
/// <param name="Position">Where.</param>
/// <param name="SlopeBefore">Derivative just below.</param>
/// <param name="SlopeAfter">Derivative just above.</param>
/// <param name="Jump">Value just above minus value just below.</param>
internal readonly record struct FormulaKink(double Position, double SlopeBefore, double SlopeAfter, double Jump);

/// <summary>
/// Finds the kinks and jumps of a formula of one variable: zeros of the arguments of its switches, located by scanning and then by halving down to
/// neighbouring doubles.
/// </summary>
/// <remarks>
/// An argument is scanned at <see cref="Samples"/> even steps; where its derivative changes sign between two samples of equal sign, the extremum in
/// between is looked at as well. Two zeros of one argument closer together than a step are therefore found unless its derivative has several zeros
/// in that step too. A switch that leaves neither a jump of the slope nor of the value behind, such as x·abs(x), gives no kink.
/// </remarks>
internal sealed class FormulaKinks
{
    /// <summary>Steps of the scan over an interval.</summary>
    public const int Samples = 4096;

    private const double Vanishing = 1e-11;

    private readonly FormulaNode root;
    private readonly FormulaNode slope;
    private readonly List<(FormulaNode Argument, FormulaNode Derivative)> arguments = [];

    public FormulaKinks(Formula formula)
    {
        root = formula.Root;
        slope = formula.DerivativeNode(root, false);
        foreach (var node in FormulaEvaluator.OrderOf([root]))
        {
            if (!node.IsSwitch)
                continue;
            var argument = node.Kind is NodeKind.Minimum or NodeKind.Maximum ? formula.DifferenceNode(node.A!, node.B!) : node.A!;
            if (!arguments.Exists(known => known.Argument == argument))
                arguments.Add((argument, formula.DerivativeNode(argument, false)));
        }
    }

    public List<FormulaKink> Find(double from, double to)
    {
        var candidates = new List<double>();
        foreach (var (argument, derivative) in arguments)
            FindZeros(argument, derivative, from, to, candidates);
        candidates.RemoveAll(position => position <= from || position >= to);
        candidates.Sort();
        Merge(candidates, from, to);
        var kinks = new List<FormulaKink>();
        if (candidates.Count == 0)
            return kinks;

        var evaluator = new FormulaEvaluator(root, slope);
        var (slopeScale, valueScale) = Scales(evaluator, from, to);
        for (var i = 0; i < candidates.Count; i++)
        {
            var position = candidates[i];
            // Close enough that no other kink lies between, far enough that arguments with a flat zero have a sign.
            var room = Math.Min(position - (i > 0 ? candidates[i - 1] : from), (i + 1 < candidates.Count ? candidates[i + 1] : to) - position);
            var offset = Math.Min(0.5 * room, 1e-6 * (to - from));
            var (slopeBefore, valueBefore) = OneSided(evaluator, position, position - offset);
            var (slopeAfter, valueAfter) = OneSided(evaluator, position, position + offset);
            if (!double.IsFinite(valueBefore) || !double.IsFinite(valueAfter) || double.IsNaN(slopeBefore) || double.IsNaN(slopeAfter))
                continue;
            var jump = valueAfter - valueBefore;
            if (Math.Abs(jump) <= Vanishing * valueScale)
                jump = 0;
            if (jump != 0 || Math.Abs(slopeAfter - slopeBefore) > Vanishing * slopeScale)
                kinks.Add(new FormulaKink(position, slopeBefore, slopeAfter, jump));
        }

        return kinks;
    }

    private (double Slope, double Value) OneSided(FormulaEvaluator evaluator, double position, double beside)
    {
        evaluator.Evaluate(beside, 0);
        evaluator.EvaluateOnSameBranches(position, 0);
        return (evaluator[slope], evaluator[root]);
    }

    /// <summary>Largest finite |slope| and |value| on a coarse scan: what a jump is compared with before it counts.</summary>
    private (double Slope, double Value) Scales(FormulaEvaluator evaluator, double from, double to)
    {
        var (slopeScale, valueScale) = (0.0, 0.0);
        for (var i = 0; i <= 64; i++)
        {
            evaluator.Evaluate(from + (to - from) * (i / 64.0), 0);
            if (double.IsFinite(evaluator[slope]))
                slopeScale = Math.Max(slopeScale, Math.Abs(evaluator[slope]));
            if (double.IsFinite(evaluator[root]))
                valueScale = Math.Max(valueScale, Math.Abs(evaluator[root]));
        }

        return (slopeScale, valueScale);
    }

    private static void FindZeros(FormulaNode argument, FormulaNode derivative, double from, double to, List<double> zeros)
    {
        var evaluator = new FormulaEvaluator(argument, derivative);
        double At(double x)
        {
            evaluator.Evaluate(x, 0);
            return evaluator[argument];
        }

        double SlopeAt(double x)
        {
            evaluator.Evaluate(x, 0);
            return evaluator[derivative];
        }

        var (before, valueBefore, slopeBefore) = (from, At(from), SlopeAt(from));
        for (var i = 1; i <= Samples; i++)
        {
            var now = i == Samples ? to : from + (to - from) * ((double)i / Samples);
            var (valueNow, slopeNow) = (At(now), SlopeAt(now));
            if (valueNow == 0)
                zeros.Add(now);
            if (valueBefore * valueNow < 0)
            {
                zeros.Add(Halve(At, before, now));
            }
            else if (valueBefore * valueNow > 0 && slopeBefore * slopeNow < 0 && slopeBefore * valueBefore < 0)
            {
                // It comes nearer to zero and then leaves again: does it cross twice?
                var turn = Halve(SlopeAt, before, now);
                if (At(turn) * valueBefore < 0)
                {
                    zeros.Add(Halve(At, before, turn));
                    zeros.Add(Halve(At, turn, now));
                }
            }

            (before, valueBefore, slopeBefore) = (now, valueNow, slopeNow);
        }
    }

    /// <summary>Halves a bracket of a change of sign down to neighbouring doubles and returns the end where the function is smaller.</summary>
    private static double Halve(Func<double, double> function, double low, double high)
    {
        var valueLow = function(low);
        var valueHigh = function(high);
        while (true)
        {
            var middle = low + 0.5 * (high - low);
            if (middle <= low || middle >= high)
                return Math.Abs(valueLow) <= Math.Abs(valueHigh) ? low : high;
            var value = function(middle);
            if (value == 0)
                return middle;
            if (value < 0 == valueLow < 0)
                (low, valueLow) = (middle, value);
            else
                (high, valueHigh) = (middle, value);
        }
    }

    /// <summary>Zeros of different arguments that agree to rounding are one place.</summary>
    private static void Merge(List<double> sorted, double from, double to)
    {
        var width = 1e-13 * Math.Max(to - from, Math.Max(Math.Abs(from), Math.Abs(to)));
        for (var i = sorted.Count - 1; i > 0; i--)
        {
            if (sorted[i] - sorted[i - 1] <= width)
                sorted.RemoveAt(Math.Abs(sorted[i]) < Math.Abs(sorted[i - 1]) ? i - 1 : i);
        }
    }
}
