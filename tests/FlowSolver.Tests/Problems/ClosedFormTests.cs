using FlowSolver.Problems;
using FlowSolver.Problems.ClosedForms;

namespace FlowSolver.Tests.Problems;

/// <summary>
/// Each exact solution is put into its equation ∂ρ/∂t = ∂(ρV′ + T∂ρ/∂x)/∂x by fourth-order differences.
/// Mutations tried and seen to fail: decay e^(−2ζt) for e^(−4ζt); erf argument of dry friction without the factor √(4Tt); variance of the quadratic
/// well with e^(−λt); an image between walls dropped.
/// </summary>
public class ClosedFormTests
{
    public static TheoryData<ClosedForm, double> Cases => new()
    {
        { new OrnsteinUhlenbeck(1.3, 0.5, 0.8, 0.2), 0.4 },
        { new OrnsteinUhlenbeck(0.4, 2, -1.5, 0), 0.7 },
        { new HyperbolicBistable(0.25, 1), 0.3 },
        { new HyperbolicBistable(0.1, -0.6), 1.1 },
        { new DryFriction(1, 1, 0.7), 0.5 },
        { new DryFriction(2, 0.4, -1.2), 0.3 },
        { new FreeDiffusion(0.3, 0.2, 0.1), 0.6 },
        { new FreeDiffusion(0.3, 0.2, 0.01, new Interval(-1, 1)), 0.6 },
        { new FreeDiffusion(0.3, 0.8, 0.01, new Interval(-1, 1, AxisEnds.Periodic)), 0.6 },
    };

    [Theory]
    [MemberData(nameof(Cases))]
    public void Density_PutIntoItsEquation_LeavesNothing(ClosedForm form, double time)
    {
        const double dx = 2e-3, dt = 1e-3;
        var largest = 0.0;
        var residual = 0.0;
        for (var k = -20; k <= 20; k++)
        {
            // Off the kink at 0 by more than the stencil.
            var x = 0.0431 * k + 0.013;
            if (!form.Potential.IsSmooth && Math.Abs(x) < 3 * dx)
                continue;
            var timeDerivative = First(t => form.DensityAt(t, x), time, dt);
            var divergence = First(p => Flux(form, time, p, dx), x, dx);
            residual = Math.Max(residual, Math.Abs(timeDerivative - divergence));
            largest = Math.Max(largest, Math.Abs(timeDerivative));
        }

        Assert.True(residual < 3e-6 * Math.Max(largest, 1), $"residual {residual:g3} beside {largest:g3}");
    }

    [Theory]
    [MemberData(nameof(Cases))]
    public void Density_OverItsSupport_HasMassOne(ClosedForm form, double time)
    {
        var support = form.Support(time);
        const int points = 4000;
        var sum = 0.0;
        for (var i = 0; i < points; i++)
            sum += form.DensityAt(time, support.From + (i + 0.5) * support.Length / points);
        Assert.Equal(1, sum * support.Length / points, form.Potential.IsSmooth ? 1e-12 : 1e-4);
    }

    [Theory]
    [MemberData(nameof(Cases))]
    public void Potential_Jet_AgreesWithDifferences(ClosedForm form, double time)
    {
        Assert.True(time > 0);
        double[] value = [0], slope = [0], curvature = [0], alone = [0];
        foreach (var x in new[] { -0.71, 0.13, 0.9 })
        {
            form.Potential.Jet([x], [], new PotentialJet { Value = value, GradientX = slope, HessianXX = curvature });
            form.Potential.Gradient([x], [], alone, []);
            Assert.Equal(form.Potential.ValueAt(x), value[0]);
            Assert.Equal(slope[0], alone[0]);
            Assert.Equal(First(p => form.Potential.ValueAt(p), x, 1e-3), slope[0], 1e-8);
            Assert.Equal(First(p => First(q => form.Potential.ValueAt(q), p, 1e-3), x, 1e-3), curvature[0], 1e-6);
        }
    }

    private static double Flux(ClosedForm form, double time, double x, double dx)
    {
        double[] slope = [0];
        form.Potential.Gradient([x], [], slope, []);
        return form.DensityAt(time, x) * slope[0] + form.Temperature * First(p => form.DensityAt(time, p), x, dx);
    }

    private static double First(Func<double, double> f, double x, double step)
        => (8 * (f(x + step) - f(x - step)) - (f(x + 2 * step) - f(x - 2 * step))) / (12 * step);
}
