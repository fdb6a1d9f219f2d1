using FlowSolver.Foundation;

namespace FlowSolver.Tests.Published;

/// <summary>
/// M. Abramowitz, I. Stegun, Handbook of Mathematical Functions, NBS AMS 55 (1964), tables 9.8-9.11; NIST Digital Library of Mathematical Functions
/// 10.75: I₀ and I₁, with digits recomputed at 20 places outside this program.
/// </summary>
public class BesselTableTests
{
    [Theory]
    [InlineData(0.5, 1.063483370741324, 0.2578943053908963)]
    [InlineData(1, 1.266065877752008, 0.565159103992485)]
    [InlineData(2, 2.279585302336067, 1.590636854637329)]
    [InlineData(5, 27.23987182360445, 24.33564214245053)]
    [InlineData(10, 2815.716628466254, 2670.988303701255)]
    public void ScaledBesselI_TableArguments_AgreesWithHandbook(double argument, double orderZero, double orderOne)
    {
        var values = new double[2];
        Chebyshev.ScaledBesselI(argument, values);
        Assert.Equal(1, values[0] * Math.Exp(argument) / orderZero, 2e-15);
        Assert.Equal(1, values[1] * Math.Exp(argument) / orderOne, 2e-15);
    }
}
