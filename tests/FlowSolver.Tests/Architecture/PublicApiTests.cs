using System.Reflection;
using System.Text;
using FlowSolver.Grids;

namespace FlowSolver.Tests.Architecture;

/// <summary>
/// The library's public surface stands in <c>public-api.txt</c>: a change of it is seen in review. Renew the file by running this test with the
/// environment variable FLOWSOLVER_RENEW=1. Tried: making a method of Grid internal fails here.
/// </summary>
public sealed class PublicApiTests
{
    [Fact]
    public void PublicSurface_IsTheOneOnFile()
    {
        var path = Path.Combine(RoomArrowsTests.Root, "tests", "FlowSolver.Tests", "Architecture", "public-api.txt");
        var found = Surface(typeof(Grid).Assembly);
        if (Environment.GetEnvironmentVariable("FLOWSOLVER_RENEW") == "1")
            File.WriteAllText(path, found);
        var stored = File.ReadAllText(path).Split('\n');
        var now = found.Split('\n');
        var gone = stored.Except(now).Take(10).ToList();
        var added = now.Except(stored).Take(10).ToList();
        Assert.True(gone.Count == 0 && added.Count == 0,
            $"The public surface changed. Renew the file with FLOWSOLVER_RENEW=1 if that is meant.\nGone:\n{string.Join('\n', gone)}\nAdded:\n{string.Join('\n', added)}");
    }

    private static string Surface(Assembly assembly)
    {
        var text = new StringBuilder();
        foreach (var type in assembly.GetExportedTypes().OrderBy(type => type.FullName, StringComparer.Ordinal))
        {
            text.Append(Kind(type)).Append(' ').Append(type.FullName).Append('\n');
            var members = type.GetMembers(BindingFlags.Public | BindingFlags.NonPublic | BindingFlags.Instance | BindingFlags.Static | BindingFlags.DeclaredOnly)
                .Where(IsVisible).Select(Line).Where(line => line.Length > 0).Distinct().Order(StringComparer.Ordinal);
            foreach (var line in members)
                text.Append("    ").Append(line).Append('\n');
        }

        return text.ToString();
    }

    private static string Kind(Type type) => type.IsEnum ? "enum"
        : typeof(Delegate).IsAssignableFrom(type) ? "delegate"
        : type.IsInterface ? "interface"
        : type.IsValueType ? "struct"
        : type is { IsAbstract: true, IsSealed: true } ? "static class"
        : type.IsAbstract ? "abstract class"
        : type.IsSealed ? "sealed class" : "class";

    private static bool IsVisible(MemberInfo member) => member switch
    {
        MethodBase method => method.IsPublic || method.IsFamily || method.IsFamilyOrAssembly,
        FieldInfo field => field.IsPublic || field.IsFamily || field.IsFamilyOrAssembly,
        _ => false,
    };

    // What the compiler makes for records says nothing that the record's name and properties do not.
    private static string Line(MemberInfo member) => member switch
    {
        _ when member.Name.Contains('<', StringComparison.Ordinal) || member.Name is "PrintMembers" or "Deconstruct" or "GetHashCode" or "Equals" or "ToString" or "op_Equality" or "op_Inequality" or "get_EqualityContract" => "",
        ConstructorInfo constructor => $"new({Parameters(constructor)})",
        MethodInfo method => $"{(method.IsStatic ? "static " : "")}{Name(method.ReturnType)} {method.Name}({Parameters(method)})",
        FieldInfo field => $"{(field.IsStatic ? "static " : "")}{Name(field.FieldType)} {field.Name}",
        _ => "",
    };

    private static string Parameters(MethodBase method)
        => string.Join(", ", method.GetParameters().Select(parameter => $"{Name(parameter.ParameterType)} {parameter.Name}"));

    private static string Name(Type type)
    {
        if (!type.IsGenericType)
            return type.Name;
        var arguments = string.Join(", ", type.GetGenericArguments().Select(Name));
        return $"{type.Name.Split('`')[0]}<{arguments}>";
    }
}
