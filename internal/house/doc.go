// Package house keeps the house in order: its tests guard which package may
// import which, and that README.md and DEVELOPERS.md speak of what is there.
package house
