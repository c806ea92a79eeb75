package main

func soundSupported() bool { return false }

var inputsCommand = &command{name: "inputs"}
