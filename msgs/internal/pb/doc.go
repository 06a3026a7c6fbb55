// Package pb is what protoc made of selvage.proto; package msgs alone uses it.
package pb
