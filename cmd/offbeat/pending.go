package main

type simSpec struct{ x int }

func (s *simSpec) rate() float64 { return 48000 }

var defaultSim simSpec
var simKeys = []string{"seed"}

func readSim(m *mapping, in *inputSpec) error { return nil }
func soundSupported() bool                    { return false }

var inputsCommand = &command{name: "inputs"}
var simulateCommand = &command{name: "simulate"}
var checkCommand = &command{name: "check"}
var runCommand = &command{name: "run"}
