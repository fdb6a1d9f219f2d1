using FlowSolver.Foundation;

namespace FlowSolver.Problems.ClosedForms;

/// <summary>No potential: the heat equation from a normal density, on the line, between walls or on a circle.</summary>
/// <remarks>
/// On the line the heat kernel: normal with mean m₀ and variance v₀ + 2Tt. Between walls the sum of the images mirrored at them, on a circle the sum
/// of the images one turn apart (H. Carslaw, J. Jaeger, Conduction of Heat in Solids, 2nd ed. 1959, from memory).
/// </remarks>
public sealed class FreeDiffusion : ClosedForm
{
    private readonly double startMean;
    private readonly double startVariance;
    private readonly Interval? axis;

    /// <summary>States the problem.</summary>
    /// <param name="temperature">T, above 0.</param>
    /// <param name="startMean">m₀.</param>
    /// <param name="startVariance">v₀, not below 0; 0 is a point.</param>
    /// <param name="axis">The interval between walls or the circle; null for the line.</param>
    public FreeDiffusion(double temperature, double startMean, double startVariance, Interval? axis = null)
    {
        Temperature = Require.Positive(temperature);
        this.startMean = Require.Finite(startMean);
        this.startVariance = Require.NotNegative(startVariance);
        this.axis = axis;
    }

    /// <inheritdoc/>
    public override double Temperature { get; }

    /// <inheritdoc/>
    public override Potential Potential { get; } = new Flat();

    /// <inheritdoc/>
    public override string Source => "Carslaw, Jaeger, Conduction of Heat in Solids, 1959";

    /// <summary>v₀ + 2Tt: the variance on the line.</summary>
    public double Variance(double time) => startVariance + 2 * Temperature * time;

    /// <inheritdoc/>
    public override Interval Support(double until)
    {
        if (axis is not null)
            return axis;
        var reach = 9 * Math.Sqrt(Variance(until));
        return new Interval(startMean - reach, startMean + reach);
    }

    /// <inheritdoc/>
    public override void Density(double time, ReadOnlySpan<double> x, Span<double> density)
    {
        Require.NotNegative(time);
        Require.Length(density.Length, x.Length);
        var variance = Require.Positive(Variance(time));
        var images = axis is null ? 0 : (int)Math.Ceiling(39 * Math.Sqrt(variance) / axis.Length) + 1;
        for (var i = 0; i < x.Length; i++)
        {
            var sum = 0.0;
            for (var k = -images; k <= images; k++)
            {
                if (axis is null)
                {
                    sum = Bell(x[i] - startMean);
                }
                else if (axis.Ends == AxisEnds.Periodic)
                {
                    sum += Bell(x[i] - startMean - k * axis.Length);
                }
                else
                {
                    sum += Bell(x[i] - startMean - 2 * k * axis.Length)
                        + Bell(x[i] + startMean - 2 * axis.From - 2 * k * axis.Length);
                }
            }

            density[i] = sum;
        }

        double Bell(double off) => Math.Exp(-off * off / (2 * variance)) / Math.Sqrt(2 * Math.PI * variance);
    }

    private sealed class Flat : LinePotential
    {
        public override string Description => "0";

        public override PotentialForm Form => new QuadraticForm(0, 0, 0, 0, 0, 0);

        protected override (double Value, double Slope, double Curvature) At(double x) => (0, 0, 0);
    }
}
