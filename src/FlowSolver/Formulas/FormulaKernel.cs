using System.Linq.Expressions;
using System.Reflection;
using System.Runtime.InteropServices;
using System.Runtime.Intrinsics;
using FlowSolver.Foundation;

namespace FlowSolver.Formulas;

/// <summary>
/// Up to six nodes compiled to one loop over spans, eight points at a time, each shared subexpression computed once. Immutable and safe to use from
/// several threads; a call allocates nothing.
/// </summary>
internal sealed class FormulaKernel
{
    public const int MostOutputs = 6;

    // Longer inline expressions gain nothing and make the compiler of expression trees recurse deeply.
    private const int DeepestInline = 12;

    private delegate void Loop(
        ref double x, ref double y, ref double out0, ref double out1, ref double out2, ref double out3, ref double out4, ref double out5, long count);

    private readonly Loop loop;
    private readonly int outputCount;

    public FormulaKernel(params ReadOnlySpan<FormulaNode> outputs)
    {
        outputCount = outputs.Length;
        loop = new Emitter(outputs).Compile();
    }

    /// <summary>Evaluates one output.</summary>
    public void Run(ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> target)
        => Run(x, y, target, default, default, default, default, default);

    /// <summary>Evaluates all outputs; spans beyond their number are ignored.</summary>
    public void Run(
        ReadOnlySpan<double> x, ReadOnlySpan<double> y, Span<double> out0, Span<double> out1, Span<double> out2 = default,
        Span<double> out3 = default, Span<double> out4 = default, Span<double> out5 = default)
    {
        var count = x.Length;
        if (y.Length != 0)
            Require.Length(y.Length, count);
        Require.Length(out0.Length, count);
        if (outputCount > 1)
            Require.Length(out1.Length, count);
        if (outputCount > 2)
            Require.Length(out2.Length, count);
        if (outputCount > 3)
            Require.Length(out3.Length, count);
        if (outputCount > 4)
            Require.Length(out4.Length, count);
        if (outputCount > 5)
            Require.Length(out5.Length, count);

        var lanes = Vector512<double>.Count;
        var whole = count - count % lanes;
        if (whole > 0)
        {
            loop(
                ref MemoryMarshal.GetReference(x), ref MemoryMarshal.GetReference(y), ref MemoryMarshal.GetReference(out0),
                ref MemoryMarshal.GetReference(out1), ref MemoryMarshal.GetReference(out2), ref MemoryMarshal.GetReference(out3),
                ref MemoryMarshal.GetReference(out4), ref MemoryMarshal.GetReference(out5), whole);
        }

        var rest = count - whole;
        if (rest == 0)
            return;
        // The last few points go through the same loop in a buffer, filled up with the last point: the same value wherever a point stands.
        Span<double> buffer = stackalloc double[(2 + MostOutputs) * lanes];
        var restX = buffer[..lanes];
        var restY = buffer.Slice(lanes, lanes);
        restX.Fill(x[^1]);
        x[whole..].CopyTo(restX);
        if (y.Length != 0)
        {
            restY.Fill(y[^1]);
            y[whole..].CopyTo(restY);
        }

        loop(
            ref restX[0], ref restY[0], ref buffer[2 * lanes], ref buffer[3 * lanes], ref buffer[4 * lanes], ref buffer[5 * lanes],
            ref buffer[6 * lanes], ref buffer[7 * lanes], lanes);
        buffer.Slice(2 * lanes, rest).CopyTo(out0[whole..]);
        if (outputCount > 1)
            buffer.Slice(3 * lanes, rest).CopyTo(out1[whole..]);
        if (outputCount > 2)
            buffer.Slice(4 * lanes, rest).CopyTo(out2[whole..]);
        if (outputCount > 3)
            buffer.Slice(5 * lanes, rest).CopyTo(out3[whole..]);
        if (outputCount > 4)
            buffer.Slice(6 * lanes, rest).CopyTo(out4[whole..]);
        if (outputCount > 5)
            buffer.Slice(7 * lanes, rest).CopyTo(out5[whole..]);
    }

    /// <summary>Writes the loop as an expression tree.</summary>
    private sealed class Emitter
    {
        private static readonly Type Vector = typeof(Vector512<double>);
        private static readonly MethodInfo Broadcast = typeof(Vector512).GetMethod(nameof(Vector512.Create), [typeof(double)])!;
        private static readonly MethodInfo LoadMethod = Generic(nameof(Vector512.LoadUnsafe));
        private static readonly MethodInfo StoreMethod = Generic(nameof(Vector512.StoreUnsafe));

        private readonly FormulaNode[] outputs;
        private readonly FormulaNode[] order;
        private readonly Dictionary<FormulaNode, int> uses = [];
        private readonly Dictionary<FormulaNode, (Expression Expression, int Depth)> written = [];
        private readonly Dictionary<(FormulaNode, int), ParameterExpression> powers = [];
        private readonly HashSet<FormulaNode> bothSinAndCos = [];
        private readonly Dictionary<FormulaNode, ParameterExpression> sinCos = [];
        private readonly List<ParameterExpression> locals = [];
        private readonly List<Expression> body = [];
        private readonly ParameterExpression index = Expression.Variable(typeof(long), "index");
        private readonly ParameterExpression count = Expression.Parameter(typeof(long), "count");
        private readonly ParameterExpression[] sources = [Reference("x"), Reference("y")];
        private readonly ParameterExpression[] targets = new ParameterExpression[MostOutputs];

        public Emitter(ReadOnlySpan<FormulaNode> outputs)
        {
            this.outputs = outputs.ToArray();
            order = FormulaEvaluator.OrderOf(outputs);
            for (var i = 0; i < targets.Length; i++)
                targets[i] = Reference("out" + i);
            foreach (var output in outputs)
                CountUse(output);
            foreach (var node in order)
            {
                CountUse(node.A);
                CountUse(node.B);
                CountUse(node.C);
            }

            bothSinAndCos.UnionWith(order.Where(node => node.Kind == NodeKind.Sin).Select(node => node.A!));
            bothSinAndCos.IntersectWith(order.Where(node => node.Kind == NodeKind.Cos).Select(node => node.A!));
        }

        public Loop Compile()
        {
            foreach (var node in order)
                Write(node);
            // All stores come last, so that a target may be the same span as a source.
            for (var i = 0; i < outputs.Length; i++)
                body.Add(Expression.Call(StoreMethod, written[outputs[i]].Expression, targets[i], Offset()));
            body.Add(Expression.AddAssign(index, Expression.Constant((long)Vector512<double>.Count)));
            var done = Expression.Label();
            var loop = Expression.Loop(
                Expression.IfThenElse(Expression.LessThan(index, count), Expression.Block(locals, body), Expression.Break(done)), done);
            var method = Expression.Block([index], Expression.Assign(index, Expression.Constant(0L)), loop);
            return Expression.Lambda<Loop>(method, [.. sources, .. targets, count]).Compile();
        }

        private void CountUse(FormulaNode? node)
        {
            if (node is not null)
                uses[node] = uses.GetValueOrDefault(node) + 1;
        }

        private void Write(FormulaNode node)
        {
            var depth = 1 + Math.Max(Math.Max(DepthOf(node.A), DepthOf(node.B)), DepthOf(node.C));
            var expression = Translate(node);
            // A constant becomes a memory operand wherever it stands; anything else that is used twice, or nested deep, is kept in a local.
            if (node.Kind != NodeKind.Number && expression is not ParameterExpression && (uses[node] > 1 || depth > DeepestInline))
                (expression, depth) = (Keep(expression), 0);
            written.Add(node, (expression, expression is ParameterExpression ? 0 : depth));
        }

        private int DepthOf(FormulaNode? node) => node is null ? 0 : written[node].Depth;

        private ParameterExpression Keep(Expression expression)
        {
            var local = Expression.Variable(Vector);
            locals.Add(local);
            body.Add(Expression.Assign(local, expression));
            return local;
        }

        private Expression Translate(FormulaNode node)
        {
            var a = node.A is null ? null : written[node.A].Expression;
            var b = node.B is null ? null : written[node.B].Expression;
            var c = node.C is null ? null : written[node.C].Expression;
            return node.Kind switch
            {
                NodeKind.Number => Constant(node.Value),
                NodeKind.X => Keep(Expression.Call(LoadMethod, sources[0], Offset())),
                NodeKind.Y => Keep(Expression.Call(LoadMethod, sources[1], Offset())),
                NodeKind.Add => Expression.Add(a!, b!),
                NodeKind.Subtract => Expression.Subtract(a!, b!),
                NodeKind.Multiply => Expression.Multiply(a!, b!),
                NodeKind.Divide => Expression.Divide(a!, b!),
                NodeKind.IntegerPower => WholePower(node.A!, node.Exponent),
                NodeKind.Power => PowerOf(node, a!, b!),
                NodeKind.Minimum or NodeKind.Maximum => Expression.Call(FunctionOf(node.Kind), a!, b!),
                NodeKind.Select => Expression.Call(FunctionOf(node.Kind), a!, b!, c!),
                NodeKind.Sin or NodeKind.Cos => SinOrCos(node, a!),
                _ => Expression.Call(FunctionOf(node.Kind), a!),
            };
        }

        private Expression SinOrCos(FormulaNode node, Expression a)
        {
            // Where both are needed they come from one call.
            if (!bothSinAndCos.Contains(node.A!))
                return Expression.Call(FunctionOf(node.Kind), a);
            if (!sinCos.TryGetValue(node.A!, out var pair))
            {
                pair = Expression.Variable(typeof((Vector512<double>, Vector512<double>)));
                locals.Add(pair);
                body.Add(Expression.Assign(pair, Expression.Call(typeof(VectorFunctions), nameof(VectorFunctions.SinCos), null, a)));
                sinCos.Add(node.A!, pair);
            }

            return Keep(Expression.Field(pair, node.Kind == NodeKind.Sin ? "Item1" : "Item2"));
        }

        private Expression PowerOf(FormulaNode node, Expression a, Expression b)
        {
            // Half-integer exponents: a product and a square root. Both agree with the power at 0 and are NaN below it.
            if (node.B!.IsNumber && node.B.Value is >= -16 and <= 16 && node.B.Value * 2 == Math.Floor(node.B.Value * 2))
            {
                var magnitude = Math.Abs(node.B.Value);
                var root = Expression.Call(FunctionOf(NodeKind.Sqrt), a);
                Expression power = magnitude == 0.5 ? root : Expression.Multiply(WholePower(node.A!, (int)Math.Floor(magnitude)), root);
                return node.B.Value > 0 ? power : Expression.Divide(Constant(1), power);
            }

            return Expression.Call(FunctionOf(NodeKind.Power), a, b);
        }

        /// <summary>A whole power as products; partial powers of one base are shared by all of its powers.</summary>
        private Expression WholePower(FormulaNode node, int exponent)
        {
            if (exponent < 0)
                return Expression.Divide(Constant(1), WholePower(node, -exponent));
            if (exponent == 1)
                return written[node].Expression;
            if (powers.TryGetValue((node, exponent), out var known))
                return known;
            Expression product;
            if (exponent % 2 == 0)
            {
                var half = Kept(node, exponent / 2);
                product = Expression.Multiply(half, half);
            }
            else
            {
                product = Expression.Multiply(WholePower(node, exponent - 1), Kept(node, 1));
            }

            var local = Keep(product);
            powers.Add((node, exponent), local);
            return local;
        }

        private Expression Kept(FormulaNode node, int exponent)
        {
            var expression = WholePower(node, exponent);
            if (expression is ParameterExpression)
                return expression;
            var local = Keep(expression);
            written[node] = (local, 0);
            return local;
        }

        private static Expression Constant(double value) => Expression.Call(Broadcast, Expression.Constant(value));

        private UnaryExpression Offset() => Expression.Convert(Expression.Convert(index, typeof(ulong)), typeof(nuint));

        private static ParameterExpression Reference(string name) => Expression.Parameter(typeof(double).MakeByRefType(), name);

        private static MethodInfo FunctionOf(NodeKind kind) => typeof(VectorFunctions).GetMethod(kind.ToString(), BindingFlags.Public | BindingFlags.Static)!;

        private static MethodInfo Generic(string name)
        {
            foreach (var method in typeof(Vector512).GetMethods())
            {
                if (method.Name == name && method.GetParameters()[^1].ParameterType == typeof(nuint))
                    return method.MakeGenericMethod(typeof(double));
            }

            throw new MissingMethodException(nameof(Vector512), name);
        }
    }
}
