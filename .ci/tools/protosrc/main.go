// Command protosrc writes the google .proto files that are linked into the
// pinned runtime modules to a folder, so that the protocol compiler finds them
// in the versions of the runtime and none of them has to be committed.
package main

import (
	"fmt"
	"os"
	"path/filepath"

	"github.com/jhump/protoreflect/v2/protoprint"
	_ "google.golang.org/genproto/googleapis/api/annotations"
	_ "google.golang.org/genproto/googleapis/rpc/errdetails"
	_ "google.golang.org/genproto/googleapis/rpc/status"
	"google.golang.org/protobuf/reflect/protoreflect"
	"google.golang.org/protobuf/reflect/protoregistry"
	_ "google.golang.org/protobuf/types/known/durationpb"
	_ "google.golang.org/protobuf/types/known/timestamppb"
)

func main() {
	if len(os.Args) != 2 {
		fmt.Fprintln(os.Stderr, "usage: protosrc FOLDER")
		os.Exit(2)
	}
	if err := write(os.Args[1]); err != nil {
		fmt.Fprintln(os.Stderr, err)
		os.Exit(1)
	}
}

// write prints every linked file.
func write(folder string) error {
	var failed error
	protoregistry.GlobalFiles.RangeFiles(func(fd protoreflect.FileDescriptor) bool {
		failed = writeFile(filepath.Join(folder, fd.Path()), fd)
		return failed == nil
	})
	return failed
}

func writeFile(path string, fd protoreflect.FileDescriptor) error {
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return err
	}
	file, err := os.Create(path)
	if err != nil {
		return err
	}
	if err := new(protoprint.Printer).PrintProtoFile(fd, file); err != nil {
		return fmt.Errorf("print %s: %w", fd.Path(), err)
	}
	return file.Close()
}
