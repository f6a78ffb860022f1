package rpc

import (
	"context"
	"errors"
	"log/slog"
	"strconv"

	"google.golang.org/protobuf/types/known/timestamppb"

	pb "example.com/admit/api/admit/v1"
	"example.com/admit/service/inspection"
	"example.com/admit/service/parttype"
	"example.com/admit/service/parttype/document"
)

// partTypeService publishes and shows limits files.
type partTypeService struct {
	pb.UnimplementedPartTypeServiceServer
	s *Server
}

// parseLimits reads a limits file; all its faults come back as one fault of the field.
func parseLimits(field string, file []byte) (*parttype.PartType, error) {
	if len(file) > MaxLimitsFile {
		return nil, malformed(field, "want at most %d bytes, got %d", MaxLimitsFile, len(file))
	}
	p, err := parttype.Parse("part-type.yaml", file)
	var list document.Faults
	if errors.As(err, &list) {
		return nil, &inspection.Fault{Kind: inspection.Malformed, Field: field, Err: list}
	}
	if err == nil {
		err = inspection.CheckScope(p)
	}
	return p, err
}

// PublishPartType checks a limits file and has it kept.
func (h partTypeService) PublishPartType(ctx context.Context, m *pb.PublishPartTypeRequest) (*pb.PublishPartTypeResponse, error) {
	p, err := parseLimits("limits_file", m.GetLimitsFile())
	if err != nil {
		return nil, err
	}
	if m.GetValidateOnly() {
		return &pb.PublishPartTypeResponse{PartType: partTypeToProto(inspection.Published{PartType: p}, true), Warnings: parttype.Warnings(p)}, nil
	}
	caller := callerFrom(ctx)
	kept, already, err := h.s.o.Publisher.PublishPartType(ctx, p, caller.Name)
	if err != nil {
		if inspection.KindOf(err) == inspection.Conflict {
			h.s.security(ctx, "part_type_refused", caller.Name, pb.PartTypeService_PublishPartType_FullMethodName, err)
		}
		return nil, err
	}
	h.s.log.LogAttrs(ctx, slog.LevelInfo, "part_type_published",
		slog.String("caller", caller.Name), slog.String("part_type", p.Name), slog.Int("version", p.Version), slog.Bool("already", already))
	return &pb.PublishPartTypeResponse{PartType: partTypeToProto(kept, true), AlreadyPublished: already, Warnings: parttype.Warnings(p)}, nil
}

// GetPartType returns one version with its limits file.
func (h partTypeService) GetPartType(ctx context.Context, m *pb.GetPartTypeRequest) (*pb.GetPartTypeResponse, error) {
	if err := checkName("name", m.GetName(), true); err != nil {
		return nil, err
	}
	if m.GetVersion() > parttype.MaxVersion {
		return nil, malformed("version", "want at most %d, got %d", parttype.MaxVersion, m.GetVersion())
	}
	p, ok, err := h.s.o.Publisher.FindPartType(ctx, m.GetName(), int(m.GetVersion()))
	if err != nil {
		return nil, err
	}
	if !ok {
		return nil, inspection.Faultf(inspection.Unknown, "name", "there is no part type %q of version %d (0: the newest)", m.GetName(), m.GetVersion())
	}
	return &pb.GetPartTypeResponse{PartType: partTypeToProto(p, true)}, nil
}

// ListPartTypes returns a page of part types without their limits files. The page token holds the last name, or version, of the page
// before, so a part type that is published meanwhile neither repeats nor hides another.
func (h partTypeService) ListPartTypes(ctx context.Context, m *pb.ListPartTypesRequest) (*pb.ListPartTypesResponse, error) {
	if err := checkName("name", m.GetName(), false); err != nil {
		return nil, err
	}
	size, err := pageSize(m.GetPageSize())
	if err != nil {
		return nil, err
	}
	after, err := readToken("page_token", m.GetPageToken(), "part types", m.GetName())
	if err != nil {
		return nil, err
	}
	all, err := h.s.o.Publisher.PartTypes(ctx, m.GetName())
	if err != nil {
		return nil, err
	}
	answer := &pb.ListPartTypesResponse{}
	last := ""
	for _, p := range all {
		if after != "" && !follows(p.PartType, m.GetName(), after) {
			continue
		}
		if len(answer.PartTypes) == size {
			answer.NextPageToken = makeToken("part types", m.GetName(), last)
			break
		}
		answer.PartTypes = append(answer.PartTypes, partTypeToProto(p, false))
		if last = p.PartType.Name; m.GetName() != "" {
			last = strconv.Itoa(p.PartType.Version)
		}
	}
	return answer, nil
}

// follows reports whether a part type stands behind the position of a page token: by name, or by falling version of one name.
func follows(p *parttype.PartType, name, after string) bool {
	if name == "" {
		return p.Name > after
	}
	version, err := strconv.Atoi(after)
	return err == nil && p.Version < version
}

func partTypeToProto(p inspection.Published, file bool) *pb.PartType {
	sum := p.PartType.Hash()
	m := &pb.PartType{Name: p.PartType.Name, Version: uint32(p.PartType.Version), Sha256: sum[:], PublishedBy: p.By}
	if file {
		m.LimitsFile = p.PartType.Source
	}
	if !p.At.IsZero() {
		m.PublishedAt = timestamppb.New(p.At)
	}
	return m
}
