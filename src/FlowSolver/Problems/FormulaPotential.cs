using FlowSolver.Formulas;
using FlowSolver.Foundation;

namespace FlowSolver.Problems;

/// <summary>
/// An energy landscape given by a formula. Value, gradient and Hessian are exact and compiled to one loop each, in which they share subexpressions.
/// Immutable and safe to use from several threads; evaluation allocates nothing after the first call.
/// </summary>
public sealed class FormulaPotential : Potential
{
    private readonly Lazy<FormulaKernel> gradient;
    private readonly Lazy<FormulaKernel> jet;
    private readonly Lazy<PotentialForm?> form;
    private readonly Lazy<FormulaKinks> kinks;

    /// <summary>Makes a landscape of a formula.</summary>
    /// <exception cref="InputException">The formula's derivatives are too large; see <see cref="FormulaLanguage.MostOperations"/>.</exception>
    public FormulaPotential(Formula formula)
    {
        ArgumentNullException.ThrowIfNull(formula);
        Formula = formula;
        var value = formula.Root;
        var x = formula.DerivativeNode(value, false);
        var xx = formula.DerivativeNode(x, false);
        if (formula.Dimension == 1)
        {
            gradient = new Lazy<FormulaKernel>(() => new FormulaKernel(x));
            jet = new Lazy<FormulaKernel>(() => new FormulaKernel(value, x, xx));
        }
        else
        {
            var y = formula.DerivativeNode(value, true);
            var xy = formula.DerivativeNode(x, true);
            var yy = formula.DerivativeNode(y, true);
            gradient = new Lazy<FormulaKernel>(() => new FormulaKernel(x, y));
            jet = new Lazy<FormulaKernel>(() => new FormulaKernel(value, x, y, xx, xy, yy));
        }

        form = new Lazy<PotentialForm?>(FindForm);
        kinks = new Lazy<FormulaKinks>(() => new FormulaKinks(formula));
    }

    /// <summary>Reads a landscape; see <see cref="Formulas.Formula.Parse"/>.</summary>
    /// <exception cref="InputException">The text is not a formula.</exception>
    public static FormulaPotential Parse(string text, int dimension, IReadOnlyDictionary<string, double>? constants = null)
        => new(Formula.Parse(text, dimension, constants));

    /// <summary>The formula.</summary>
    public Formula Formula { get; }

    /// <inheritdoc/>
    public override int Dimension => Formula.Dimension;

    /// <inheritdoc/>
    public override string Description => Formula.Text;

    /// <inheritdoc/>
    public override PotentialForm? Form => form.Value;

    /// <inheritdoc/>
    public override bool IsSmooth => Formula.IsSmooth || Form is QuadraticForm;

    /// <inheritdoc/>
    public override void Value(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> value) => Formula.Value(x, y, value);

    /// <inheritdoc/>
    public override void Gradient(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> gradientX, Span<double> gradientY)
    {
        if (Dimension == 2)
            Require.Length(y.Length, x.Length);
        gradient.Value.Run(x, y, gradientX, gradientY);
    }

    /// <inheritdoc/>
    public override void Jet(ReadOnlySpan<double> x, ReadOnlySpan<double> y, PotentialJet target)
    {
        if (Dimension == 1)
        {
            jet.Value.Run(x, y, target.Value, target.GradientX, target.HessianXX);
            return;
        }

        Require.Length(y.Length, x.Length);
        jet.Value.Run(x, y, target.Value, target.GradientX, target.GradientY, target.HessianXX, target.HessianXY, target.HessianYY);
    }

    /// <inheritdoc/>
    /// <remarks>
    /// Kinks are zeros of what abs, min, max, sign and step switch on, found by a scan in 4096 steps and then located to rounding. A kink that vanishes
    /// in the whole, as in x·abs(x), is not listed. One that lies exactly at an end of the interval, or at the seam of a circle, is not inside.
    /// </remarks>
    public override IReadOnlyList<Kink> FindKinks(Interval interval)
    {
        ArgumentNullException.ThrowIfNull(interval);
        Require.That(Dimension == 1, "Kinks were asked for in two dimensions; they are points in one dimension only.");
        if (IsSmooth)
            return [];
        if (Form is AbsoluteValueForm form)
            return form.Center > interval.From && form.Center < interval.To ? [new Kink(form.Center, -form.Slope, form.Slope, 0)] : [];
        return [.. kinks.Value.Find(interval.From, interval.To).Select(kink => new Kink(kink.Position, kink.SlopeBefore, kink.SlopeAfter, kink.Jump))];
    }

    private PotentialForm? FindForm()
    {
        if (Formula.AsQuadratic() is { } q)
            return new QuadraticForm(q.Constant, q.GradientX, q.GradientY, q.HessianXX, q.HessianXY, q.HessianYY);
        return Formula.AsAbsoluteValue() is { } a ? new AbsoluteValueForm(a.Constant, a.Slope, a.Center) : null;
    }
}

/// <summary>Looks at a formula on a whole domain before anything is computed with it.</summary>
public static class FormulaCheck
{
    /// <summary>Refuses a formula that is not finite somewhere on a lattice of points over the domain, ends included.</summary>
    /// <param name="formula">The formula, of the domain's dimension.</param>
    /// <param name="what">What it is, for the sentence, such as <c>The potential</c>.</param>
    /// <param name="domain">The domain.</param>
    /// <param name="pointsX">Points along x, at least 2.</param>
    /// <param name="pointsY">Points along y, at least 2; ignored in one dimension.</param>
    /// <param name="mayBeNegative">Whether values below 0 are allowed.</param>
    /// <exception cref="InputException">It is not finite, or negative where that is not allowed; the sentence names the first such place.</exception>
    public static void RequireFinite(Formula formula, string what, Domain domain, int pointsX, int pointsY = 2, bool mayBeNegative = true)
    {
        ArgumentNullException.ThrowIfNull(formula);
        ArgumentNullException.ThrowIfNull(domain);
        Require.That(formula.Dimension == domain.Dimension, "The formula and the domain differ in dimension; they must agree.");
        Require.AtLeast(pointsX, 2);
        Require.AtLeast(pointsY, 2);
        var x = Lattice(domain.X, pointsX);
        var ys = domain.Y is null ? [0.0] : Lattice(domain.Y, pointsY);
        var y = new double[domain.Y is null ? 0 : pointsX];
        var value = new double[pointsX];
        foreach (var row in ys)
        {
            Array.Fill(y, row);
            formula.Value(x, y, value);
            for (var i = 0; i < value.Length; i++)
            {
                if (double.IsFinite(value[i]) && (mayBeNegative || value[i] >= 0))
                    continue;
                var place = domain.Y is null ? FormattableString.Invariant($"x = {x[i]}") : FormattableString.Invariant($"x = {x[i]}, y = {row}");
                var found = double.IsNaN(value[i]) ? "not a number" : double.IsInfinity(value[i]) ? value[i] > 0 ? "infinite" : "minus infinity" : FormattableString.Invariant($"{value[i]}");
                throw new InputException(new InputFault(
                    $"{what} was {found} at {place}; it must be finite{(mayBeNegative ? "" : " and not negative")} on the whole domain.",
                    "Shrink the domain or change the formula.", Detail: formula.Text.ReplaceLineEndings(" ")));
            }
        }
    }

    /// <summary>
    /// Refuses a landscape whose slope is not a number at a point where V itself is finite: there something inside the formula overflows, such as
    /// exp(1000*x) in 1/(1 + exp(1000*x)). An infinite slope, such as that of sqrt(x) at 0, passes.
    /// </summary>
    /// <param name="potential">The landscape, of the domain's dimension.</param>
    /// <param name="domain">The domain.</param>
    /// <param name="pointsX">Points along x, at least 2.</param>
    /// <param name="pointsY">Points along y, at least 2; ignored in one dimension.</param>
    /// <exception cref="InputException">There is such a point; the sentence names the first one.</exception>
    public static void RequireSlope(FormulaPotential potential, Domain domain, int pointsX, int pointsY = 2)
    {
        ArgumentNullException.ThrowIfNull(potential);
        ArgumentNullException.ThrowIfNull(domain);
        Require.That(potential.Dimension == domain.Dimension, "The potential and the domain differ in dimension; they must agree.");
        var x = Lattice(domain.X, Require.AtLeast(pointsX, 2));
        var ys = domain.Y is null ? [0.0] : Lattice(domain.Y, Require.AtLeast(pointsY, 2));
        var y = new double[domain.Y is null ? 0 : pointsX];
        var gradientX = new double[pointsX];
        var gradientY = new double[y.Length];
        foreach (var row in ys)
        {
            Array.Fill(y, row);
            potential.Gradient(x, y, gradientX, gradientY);
            for (var i = 0; i < x.Length; i++)
            {
                if (!double.IsNaN(gradientX[i]) && (domain.Y is null || !double.IsNaN(gradientY[i])))
                    continue;
                var place = domain.Y is null ? FormattableString.Invariant($"x = {x[i]}") : FormattableString.Invariant($"x = {x[i]}, y = {row}");
                throw new InputException(new InputFault(
                    $"The slope of the potential was not a number at {place}, where the potential is {FormattableString.Invariant($"{potential.ValueAt(x[i], row)}")}; it must be known on the whole domain.",
                    "Part of the formula overflows there: write it in a form that does not, such as tanh for a quotient of exponentials.",
                    Detail: potential.Description.ReplaceLineEndings(" ")));
            }
        }
    }

    private static double[] Lattice(Interval interval, int points)
    {
        var lattice = new double[points];
        for (var i = 0; i < points; i++)
            lattice[i] = i == points - 1 ? interval.To : interval.From + interval.Length * ((double)i / (points - 1));
        return lattice;
    }
}
