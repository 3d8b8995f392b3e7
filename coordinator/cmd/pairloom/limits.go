package main

import (
	"math"
	"os"
	"path"
	"path/filepath"
	"strconv"
	"strings"

	"golang.org/x/sys/unix"
)

// limits reads what the process may use: RAM and affinity, and the limits of its control
// groups, version 1 and 2. A group's limits hold for the groups below it, so all folders
// from the process's own up to the mount are looked at.
type limits struct {
	mount string // where control groups are mounted
	self  string // the file that says which groups the process is in
}

var system = limits{"/sys/fs/cgroup", "/proc/self/cgroup"}

// folders are those of the process's group that has a controller, innermost first.
func (l limits) folders(controller string) (list []string) {
	b, err := os.ReadFile(l.self)
	if err != nil {
		return nil
	}
	for _, line := range strings.Split(strings.TrimSpace(string(b)), "\n") {
		f := strings.SplitN(line, ":", 3)
		if len(f) != 3 {
			continue
		}
		bases := []string{l.mount, filepath.Join(l.mount, "unified")} // version 2, alone or beside version 1
		if f[1] != "" {
			bases = []string{filepath.Join(l.mount, f[1]), filepath.Join(l.mount, controller)}
			if !strings.Contains(","+f[1]+",", ","+controller+",") {
				continue
			}
		}
		for _, base := range bases {
			for at := path.Clean("/" + f[2]); ; at = path.Dir(at) {
				list = append(list, filepath.Join(base, at))
				if at == "/" {
					break
				}
			}
		}
	}
	return list
}

// numbers reads the numbers of a file; what is none ("max") is +Inf, no file is empty.
func numbers(folder, name string) (list []float64) {
	b, err := os.ReadFile(filepath.Join(folder, name))
	if err != nil {
		return nil
	}
	for _, f := range strings.Fields(string(b)) {
		v, err := strconv.ParseFloat(f, 64)
		if err != nil {
			v = math.Inf(1)
		}
		list = append(list, v)
	}
	return list
}

// memory is the least memory limit in bytes, +Inf if there is none.
func (l limits) memory() float64 {
	least := math.Inf(1)
	for _, folder := range l.folders("memory") {
		for _, name := range []string{"memory.max", "memory.limit_in_bytes"} {
			if v := numbers(folder, name); len(v) == 1 && v[0] > 0 {
				least = min(least, v[0])
			}
		}
	}
	return least
}

// cpus is the least quota in CPUs, +Inf if there is none.
func (l limits) cpus() float64 {
	least := math.Inf(1)
	for _, folder := range l.folders("cpu") {
		quota := append(numbers(folder, "cpu.max"), append(numbers(folder, "cpu.cfs_quota_us"), numbers(folder, "cpu.cfs_period_us")...)...)
		if len(quota) == 2 && quota[0] > 0 && quota[1] > 0 {
			least = min(least, quota[0]/quota[1])
		}
	}
	return least
}

// memoryShare is the part of what there is that a job may use where nobody says more.
const memoryShare = 0.8

// defaultMemory is 80 % of the smaller of RAM and the memory limit; 0: not known.
func (l limits) defaultMemory() uint64 {
	var info unix.Sysinfo_t
	if unix.Sysinfo(&info) != nil {
		return 0
	}
	return uint64(memoryShare * min(l.memory(), float64(info.Totalram)*float64(info.Unit)))
}

// defaultThreads is the number of CPUs allowed by affinity and quota, at least one.
func (l limits) defaultThreads() int {
	var set unix.CPUSet
	if unix.SchedGetaffinity(0, &set) != nil {
		return 1
	}
	return max(1, int(min(l.cpus(), float64(set.Count()))))
}
