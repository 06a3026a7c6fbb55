package msgs

//go:generate protoc --proto_path=. --go_out=.. --go_opt=module=selvage selvage.proto
