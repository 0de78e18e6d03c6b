//go:build !wasip1

// Command engine is compiled for WebAssembly only: see main.go.
package main

func main() {}
