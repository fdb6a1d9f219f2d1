using BenchmarkDotNet.Running;
using FlowSolver.Benchmarks;

// "peers" and "growth" and the like need no BenchmarkDotNet: they measure ratios in one run. Anything else is handed to it.
switch (args)
{
    case ["peers", .. var names]:
        return PeerComparison.RunPeers(names);
    case ["growth", .. var names]:
        return PeerComparison.RunGrowth(names);
    case ["hard-starts", .. var names]:
        return HardStarts.Run(names);
    case ["calibration"]:
        return Calibration.Run();
    default:
        BenchmarkSwitcher.FromAssembly(typeof(Program).Assembly).Run(args);
        return 0;
}
