//go:build race

package main

// raced says that the race detector is at work, which makes the stages ten
// times slower: tests then do less of the same.
const raced = true
