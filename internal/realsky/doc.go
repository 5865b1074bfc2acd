// Package realsky holds tests alone: it runs the whole chain, from the file to
// the candidates, on real frames of the sky, which no simulation of ours has
// drawn. The frames are described in testdata/realsky/README.md.
package realsky
