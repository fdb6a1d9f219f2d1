using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using BenchmarkDotNet.Attributes;
using FlowSolver.Formulas;
using FlowSolver.Foundation;
using FlowSolver.Problems;

namespace FlowSolver.Benchmarks;

/// <summary>
/// The loops that formulas are compiled to, beside the same loop written by hand and beside evaluation point by point. 2048 points, which stay in
/// the first cache.
/// </summary>
[MemoryDiagnoser]
public class FormulaBenchmarks
{
    private const int Count = 2048;
    private readonly double[] x = new double[Count];
    private readonly double[] y = new double[Count];
    private readonly double[][] target = new double[6][];
    private FormulaPotential polynomial = null!;
    private FormulaPotential transcendental = null!;
    private FormulaPotential plane = null!;
    private FormulaPotential functions = null!;

    [GlobalSetup]
    public void Prepare()
    {
        for (var i = 0; i < Count; i++)
            (x[i], y[i]) = (-2 + 4.0 * i / Count, 1 - 2.0 * i / Count);
        for (var c = 0; c < 6; c++)
            target[c] = new double[Count];
        polynomial = FormulaPotential.Parse("x^4/4 - x^2/2", 1);
        transcendental = FormulaPotential.Parse("exp(-x^2)*sin(3*x)", 1);
        plane = FormulaPotential.Parse("(x^2-1)^2 + 2*(y-x/2)^2", 2);
        functions = FormulaPotential.Parse("tanh(x) + erf(x) + atan(x) + log(1+x^2)", 1);
    }

    [Benchmark(Baseline = true)]
    public void PolynomialGradientByHand()
    {
        ref var source = ref MemoryMarshal.GetArrayDataReference(x);
        ref var result = ref MemoryMarshal.GetArrayDataReference(target[0]);
        for (nuint i = 0; i < Count; i += 8)
        {
            var u = Vector512.LoadUnsafe(ref source, i);
            (u * u * u - u).StoreUnsafe(ref result, i);
        }
    }

    [Benchmark]
    public void PolynomialGradient() => polynomial.Gradient(x, [], target[0], []);

    [Benchmark]
    public void ExpSinByHand()
    {
        ref var source = ref MemoryMarshal.GetArrayDataReference(x);
        ref var result = ref MemoryMarshal.GetArrayDataReference(target[0]);
        for (nuint i = 0; i < Count; i += 8)
        {
            var u = Vector512.LoadUnsafe(ref source, i);
            (VectorMath.Exp(-(u * u)) * VectorMath.Sin(Vector512.Create(3.0) * u)).StoreUnsafe(ref result, i);
        }
    }

    [Benchmark]
    public void ExpSinValue() => transcendental.Value(x, [], target[0]);

    [Benchmark]
    public void ExpSinJet()
        => transcendental.Jet(x, [], new PotentialJet { Value = target[0], GradientX = target[1], HessianXX = target[2] });

    [Benchmark]
    public void PlaneJet() => plane.Jet(x, y, new PotentialJet
    {
        Value = target[0],
        GradientX = target[1],
        GradientY = target[2],
        HessianXX = target[3],
        HessianXY = target[4],
        HessianYY = target[5],
    });

    [Benchmark]
    public void SpecialFunctionsValue() => functions.Value(x, [], target[0]);

    [Benchmark]
    public void ParseAndCompile()
    {
        var fresh = FormulaPotential.Parse("(x^2-1)^2 + 2*(y-x/2)^2", 2);
        fresh.Value(x, y, target[0]);
    }

    /// <summary>For the ratio: the same function point by point through the graph, a sixteenth of the points.</summary>
    [Benchmark]
    public double ExpSinPointByPoint()
    {
        var evaluator = new FormulaEvaluator(transcendental.Formula.Root);
        var sum = 0.0;
        for (var i = 0; i < Count / 16; i++)
        {
            evaluator.Evaluate(x[i], 0);
            sum += evaluator[transcendental.Formula.Root];
        }

        return sum;
    }
}
