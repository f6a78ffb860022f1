package rpc

import (
	"slices"

	healthpb "google.golang.org/grpc/health/grpc_health_v1"
	reflectionpb "google.golang.org/grpc/reflection/grpc_reflection_v1"
	reflectionalphapb "google.golang.org/grpc/reflection/grpc_reflection_v1alpha"

	pb "example.com/admit/api/admit/v1"
)

// Permission is one thing that a caller may be allowed to do.
type Permission string

// The permissions.
const (
	Fixture       Permission = "fixture"       // inspect units for the stations that it may speak for
	Operator      Permission = "operator"      // watch stations and what is recorded
	Supervisor    Permission = "supervisor"    // look through inspections and count them
	Engineer      Permission = "engineer"      // publish part types and calibrations, read raw sweeps, judge without recording
	Administrator Permission = "administrator" // look after the store
	Metrics       Permission = "metrics"       // scrape the metrics page
)

// Permissions lists every permission.
func Permissions() []Permission {
	return []Permission{Fixture, Operator, Supervisor, Engineer, Administrator, Metrics}
}

// needs says who may call what: a caller with any one of the listed permissions. A method without a row is denied to everyone, and a test
// finds it. Whether a caller may speak for the station that a message names is asked besides.
var needs = map[string][]Permission{
	pb.StationService_Inspect_FullMethodName:            {Fixture},
	pb.StationService_PublishCalibration_FullMethodName: {Fixture, Engineer},
	pb.StationService_ReadCalibration_FullMethodName:    {Fixture, Engineer},
	pb.StationService_ListStations_FullMethodName:       {Operator, Supervisor, Engineer, Administrator},
	pb.StationService_WatchStations_FullMethodName:      {Operator, Supervisor, Engineer, Administrator},

	pb.InspectionService_GetInspection_FullMethodName:    {Operator, Supervisor, Engineer},
	pb.InspectionService_ListInspections_FullMethodName:  {Operator, Supervisor, Engineer},
	pb.InspectionService_CountInspections_FullMethodName: {Supervisor, Engineer},
	pb.InspectionService_WatchInspections_FullMethodName: {Operator, Supervisor, Engineer},
	pb.InspectionService_ReadSweeps_FullMethodName:       {Engineer},

	pb.PartTypeService_PublishPartType_FullMethodName: {Engineer},
	pb.PartTypeService_GetPartType_FullMethodName:     {Supervisor, Engineer},
	pb.PartTypeService_ListPartTypes_FullMethodName:   {Supervisor, Engineer},

	pb.JudgementService_Judge_FullMethodName: {Engineer},

	pb.StoreService_GetStoreStatus_FullMethodName: {Engineer, Administrator},

	// Whoever is known may ask whether the service is well: a station needs it to end its spooling.
	healthpb.Health_Check_FullMethodName: Permissions(),
	healthpb.Health_List_FullMethodName:  Permissions(),
	healthpb.Health_Watch_FullMethodName: Permissions(),

	reflectionpb.ServerReflection_ServerReflectionInfo_FullMethodName:      {Engineer, Administrator},
	reflectionalphapb.ServerReflection_ServerReflectionInfo_FullMethodName: {Engineer, Administrator},
}

// reads holds the calls that ask for one thing by its name: for them Unknown means that this thing does not exist (NotFound), not that
// something must exist first (FailedPrecondition).
var reads = []string{
	pb.InspectionService_GetInspection_FullMethodName,
	pb.InspectionService_ReadSweeps_FullMethodName,
	pb.PartTypeService_GetPartType_FullMethodName,
	pb.StationService_ReadCalibration_FullMethodName,
}

// allowed reports whether a caller with the grant may call the method.
func allowed(g *Grant, method string) bool {
	return g.may(needs[method]...)
}

// may reports whether the grant holds any of the permissions.
func (g *Grant) may(any ...Permission) bool {
	for _, p := range any {
		if slices.Contains(g.Permissions, p) {
			return true
		}
	}
	return false
}
