using FlowSolver.Foundation;
using FlowSolver.Grids;
using FlowSolver.Problems;
using FlowSolver.Problems.ClosedForms;
using FlowSolver.Schemes.ExactFlow;
using FlowSolver.Studies;
using FlowSolver.Tests.Support;

namespace FlowSolver.Tests.Published;

/// <summary>Rates, passage times and escape rates against values from outside. Rates are extrapolated from two grids of a scheme of second order.</summary>
public class RelaxationValues
{
    private static readonly Potential Quartic = new PolynomialPotential(0, 0, -0.5, 0, 0.25);

    private static Generator On(Potential potential, double temperature, Interval interval, int cells)
        => new(new GridProblem(new Problem(potential, temperature, new Domain(interval), new GaussianStart(0.5 * (interval.From + interval.To), 1)), new Grid(new Axis(interval, cells))));

    private static double[] Rates(Potential potential, double temperature, Interval interval, int cells, int number)
    {
        double[] At(int count) => Relaxation.FindModes(On(potential, temperature, interval, count), number, 1e-6, WorkerTeam.Alone).Rates;
        var (coarse, fine) = (At(cells), At(2 * cells));
        return [.. fine.Select((rate, k) => rate + (rate - coarse[k]) / 3)];
    }

    private static void AssertRates(double[] expected, double[] found, double relative)
    {
        for (var k = 0; k < expected.Length; k++)
            Assert.True(Math.Abs(found[k] / expected[k] - 1) < relative, $"rate {k + 1}: {found[k]:r} where {expected[k]:r} was expected");
    }

    /// <summary>
    /// V = x⁴/4 − x²/2: computed at 40 digits in an oscillator basis, and by sinc collocation, outside this program. (Tables of the same problem: R. Blackmore,
    /// B. Shizgal, Phys. Rev. A 31 (1985) 1855; H. Chen, thesis, University of British Columbia 1998; abstracts read only.)
    /// </summary>
    [Theory]
    [InlineData(1, 4.6, 0.792088426579452739, 3.54888918230804070, 6.84354846431825842, 10.8269739476622558)]
    [InlineData(0.5, 4, 0.422944645397757217, 2.31491324699206431, 4.50377881521974240, 7.17547539049528363)]
    [InlineData(0.25, 3.5, 0.187170418087098538, 1.50102841771272685, 2.91517388941781509, 4.66078669535204943)]
    [InlineData(0.1, 3, 0.0335452873080006109, 0.927372102607585942, 1.68026376738833445, 2.59582057570044954)]
    [InlineData(0.05, 2.6, 0.00277614063657272552, 0.822247124500734811, 1.31415531867155303, 1.78092134422587529)]
    [InlineData(0.02, 2.2, 1.62321508872385379e-6, 0.928594763376424, 1.587317098293933, 1.674572947885960)]
    public void QuarticDoubleWell_SixTemperatures_HasTheRates(double temperature, double reach, double first, double second, double third, double fourth)
        => AssertRates([first, second, third, fourth], Rates(Quartic, temperature, new Interval(-reach, reach), 600, 4), 1e-7);

    /// <summary>
    /// V = ζ cosh 2x − 2 log cosh x at T = 1: slowest rate 4ζ, exactly; V = ζ cosh 2x − 2 log(cosh 2x + a), a = 2ζ/(1 + √(1 + 4ζ²)): 2(√(1 + 4ζ²) − 1) and 4√(1 + 4ζ²).
    /// Partners of the potential of M. Razavy, Am. J. Phys. 48 (1980) 285 (from memory).
    /// </summary>
    [Theory]
    [InlineData(0.25)]
    [InlineData(0.1)]
    [InlineData(0.05)]
    public void HyperbolicBistable_BothFamilies_HaveTheExactRates(double zeta)
    {
        var form = new HyperbolicBistable(zeta, 1);
        var interval = form.Support(0);
        AssertRates([4 * zeta], Rates(form.Potential, 1, interval, 500, 1), 1e-8);
        var root = Math.Sqrt(1 + 4 * zeta * zeta);
        var a = 2 * zeta / (1 + root);
        var second = new LinePotentialOf(x => zeta * Math.Cosh(2 * x) - 2 * Math.Log(Math.Cosh(2 * x) + a));
        AssertRates([2 * (root - 1), 4 * root], Rates(second, 1, interval, 500, 2), 1e-7);
    }

    /// <summary>Drift −b tanh x: λ_n = n(b − nT) below the continuum b²/4T (the Pöschl-Teller problem; H. Risken, The Fokker-Planck Equation, from memory).</summary>
    [Fact]
    public void TanhDrift_BoundModes_HaveTheExactRates()
    {
        var potential = new LinePotentialOf(x => 2 * (Math.Abs(x) + Math.Log((1 + Math.Exp(-2 * Math.Abs(x))) / 2)));
        AssertRates([1.7, 2.8], Rates(potential, 0.3, new Interval(-14, 14), 1500, 2), 1e-7);
    }

    /// <summary>
    /// V = |x| at T = 1 between walls at ±ℓ: λ = 1/4 + k² with tan kℓ = −2k, the first root (H. Touchette, E. Van der Straeten, W. Just, J. Phys. A 43 (2010) 445002, for
    /// the free case; the box derived for this project).
    /// </summary>
    [Theory]
    [InlineData(20, 0.2704886672)]
    [InlineData(40, 0.2555989412)]
    [InlineData(80, 0.2514679571)]
    [InlineData(160, 0.2503760755)]
    public void AbsoluteValueInBox_GapFallsTowardsAQuarter(double wall, double rate)
        => AssertRates([rate], Rates(new DryFriction(1, 1, 0).Potential, 1, new Interval(-wall, wall), (int)(40 * wall), 1), 2e-8);

    /// <summary>V = k(|x| − a)²/2: parabolic cylinder functions, D_ν(−a√(k/T)) = 0 for odd modes with λ = kν, each with an even partner at λ + k. Derived for this project.</summary>
    [Theory]
    [InlineData(1, 1, 1, 0.388238294707, 1.388238294707, 2)]
    [InlineData(1, 1, 0.1, 0.00749428644199, 1.00749428644, 1.05830297433)]
    [InlineData(2, 1, 0.5, 0.0178816973028, 1.0178816973, 1.11150701123)]
    public void PiecewiseParabolicDoubleWell_HasTheRates(double a, double k, double temperature, double first, double second, double third)
    {
        var potential = new LinePotentialOf(x => 0.5 * k * (Math.Abs(x) - a) * (Math.Abs(x) - a), x => k * (Math.Abs(x) - a) * (x < 0 ? -1 : 1), [new Kink(0, k * a, -k * a, 0)]);
        var reach = a + 9 * Math.Sqrt(temperature / k);
        AssertRates([first, second, third], Rates(potential, temperature, new Interval(-reach, reach), 700, 3), 1e-7);
    }

    /// <summary>Rectangular barrier between walls: tan kb · tan k(ℓ − b) = e^(−Δ/T) for odd modes, λ = Tk². Derived for this project.</summary>
    [Theory]
    [InlineData(2, 1, 2, 1, 0.12426571253, 2.46740110027, 7.77896296133, 9.86960440109)]
    [InlineData(2, 0.5, 1, 0.25, 0.00598326834185, 1.07510769984, 1.10395759910, 2.46740110027)]
    public void RectangularBarrier_HasTheRates(double wall, double half, double height, double temperature, double first, double second, double third, double fourth)
        => AssertRates([first, second, third, fourth], Rates(new BarrierPotential(height, half, wall), temperature, new Interval(-wall, wall), 800, 4), 1e-7);

    /// <summary>
    /// V = V₀ cos x on the circle: rates in pairs (characteristic values of an equation of Ince's type, computed outside this program), and on the line of all turns
    /// D = T/I₀(V₀/T)² (S. Lifson, J. Jackson, J. Chem. Phys. 36 (1962) 2410, from memory) = 0.6238603604 at V₀ = T = 1.
    /// </summary>
    [Theory]
    [InlineData(1, 1.16549653, 4.13375275, 0.6238603604)]
    [InlineData(0.25, 0.833553452, 1.56764329, 0.25 / (11.301921952136331 * 11.301921952136331))]
    public void CosineOnCircle_HasDoubleRatesAndDiffusion(double temperature, double first, double second, double diffusion)
    {
        var circle = new Interval(0, 2 * Math.PI, AxisEnds.Periodic);
        var potential = new LinePotentialOf(Math.Cos, x => -Math.Sin(x));
        AssertRates([first, first, second, second], Rates(potential, temperature, circle, 400, 4), 5e-9);
        double At(int cells) => EffectiveDiffusion.Of(On(potential, temperature, circle, cells))!.XX!.Value;
        Assert.Equal(1, (At(800) + (At(800) - At(400)) / 3) / diffusion, 1e-9);
    }

    /// <summary>
    /// Mean first passage −1 → 0 and −1 → 1 in V = x⁴/4 − x²/2: the double integral (1/T)∫dy e^(V/T)∫dz e^(−V/T) (C. Gardiner, Handbook of Stochastic Methods, from memory),
    /// evaluated outside this program.
    /// </summary>
    [Theory]
    [InlineData(1, 1.29056138021, 3.48830964885)]
    [InlineData(0.5, 2.52170421493, 6.69775790711)]
    [InlineData(0.25, 5.74343706804, 14.2777366365)]
    [InlineData(0.1, 30.8213024727, 66.2686263649)]
    [InlineData(0.05, 361.903759501, 729.670691942)]
    [InlineData(0.02, 616063.850977, 1232135.00928)]
    public void QuarticDoubleWell_PassageTimes_FollowTable(double temperature, double toTop, double toOther)
    {
        var reach = 2 + 2.4 * Math.Sqrt(temperature);
        double Time(int cells, double to) => PassageTimes.BetweenPoints(On(Quartic, temperature, new Interval(-reach, reach), cells), -1, to);
        double Extrapolated(double to) => Time(1600, to) + (Time(1600, to) - Time(800, to)) / 3;
        Assert.Equal(1, Extrapolated(0) / toTop, 1e-6);
        Assert.Equal(1, Extrapolated(1) / toOther, 1e-6);
    }

    /// <summary>
    /// The formula of Kramers and Eyring (H. Kramers, Physica 7 (1940) 284, from memory) for the same: 2k = (√2/π)e^(−1/4T), and the ratio of the true rate to it at four
    /// temperatures, computed outside this program.
    /// </summary>
    [Theory]
    [InlineData(0.25, 1.13023)]
    [InlineData(0.1, 0.907826)]
    [InlineData(0.05, 0.915269)]
    [InlineData(0.02, 0.967591)]
    public void QuarticDoubleWell_KramersRatio_FollowsTable(double temperature, double ratio)
    {
        var interval = new Interval(-3, 3);
        var problem = new Problem(Quartic, temperature, new Domain(interval), new GaussianStart(-1, 0.1));
        var kramers = KramersEstimate.Of(problem);
        Assert.Equal(2, kramers.Wells.Count);
        Assert.Equal(0, kramers.Passes[0].X, 1e-12);
        Assert.Equal(1, kramers.SlowRates[0] / (Math.Sqrt(2) / Math.PI * Math.Exp(-1 / (4 * temperature))), 1e-12);
        Assert.Equal(ratio, Rates(Quartic, temperature, interval, 800, 1)[0] / kramers.SlowRates[0], 1e-5);
    }
}
