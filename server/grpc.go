package server

import (
	"context"
	"time"

	"google.golang.org/grpc"
	"google.golang.org/grpc/encoding"
	protocodec "google.golang.org/grpc/encoding/proto"
	healthgrpc "google.golang.org/grpc/health/grpc_health_v1"
	"google.golang.org/grpc/keepalive"
	"google.golang.org/grpc/reflection"

	leadlinev1 "leadline.example/proto/leadline/v1"
)

// Bounds of the gRPC server, where the library's own are for trusted peers.
const (
	// maxMessageBytes is what gRPC takes: more than the service does, as gRPC
	// would give no reason.
	maxMessageBytes         = 2 * maxBodyBytes
	maxStreamsPerConnection = 1024
	maxMetadataBytes        = 16 << 10
	connectTime             = 10 * time.Second
	connectionAge           = 30 * time.Minute // so that clients spread anew
	connectionIdle          = 5 * time.Minute
	connectionGrace         = 30 * time.Second
	pingTime                = time.Minute
	pingTimeout             = 20 * time.Second
	shortestPingPause       = 20 * time.Second // of gateways that keep a link open
)

// newGRPC returns a gRPC server with the services, health and reflection.
func (s *Server) newGRPC(implementations *services) *grpc.Server {
	unary := []grpc.UnaryServerInterceptor{s.answerUnary}
	stream := []grpc.StreamServerInterceptor{s.answerStream}
	if o := s.options.Observations; o != nil { // outermost, so that it counts what the client gets
		unary = append([]grpc.UnaryServerInterceptor{o.UnaryInterceptor}, unary...)
		stream = append([]grpc.StreamServerInterceptor{o.StreamInterceptor}, stream...)
	}
	g := grpc.NewServer(
		grpc.ForceServerCodecV2(readingCodec{encoding.GetCodecV2(protocodec.Name)}),
		grpc.ChainUnaryInterceptor(unary...),
		grpc.ChainStreamInterceptor(stream...),
		grpc.MaxRecvMsgSize(maxMessageBytes),
		grpc.MaxConcurrentStreams(maxStreamsPerConnection),
		grpc.MaxHeaderListSize(maxMetadataBytes),
		grpc.ConnectionTimeout(connectTime),
		grpc.WaitForHandlers(true),
		grpc.KeepaliveParams(keepalive.ServerParameters{
			MaxConnectionIdle: connectionIdle, MaxConnectionAge: connectionAge, MaxConnectionAgeGrace: connectionGrace,
			Time: pingTime, Timeout: pingTimeout,
		}),
		grpc.KeepaliveEnforcementPolicy(keepalive.EnforcementPolicy{MinTime: shortestPingPause, PermitWithoutStream: true}),
	)
	leadlinev1.RegisterQuantityServiceServer(g, implementations.quantities)
	leadlinev1.RegisterInstrumentServiceServer(g, implementations.instruments)
	leadlinev1.RegisterReadingServiceServer(g, implementations.readings)
	leadlinev1.RegisterBeliefServiceServer(g, implementations.beliefs)
	healthgrpc.RegisterHealthServer(g, s.health)
	reflection.Register(g)
	s.publishHealth()
	return g
}

// answerUnary turns the errors and panics of the services into statuses.
func (s *Server) answerUnary(ctx context.Context, request any, info *grpc.UnaryServerInfo, handle grpc.UnaryHandler) (any, error) {
	var response any
	err := recovered(func() (err error) {
		if isTooLarge(request) {
			return messageTooLarge()
		}
		response, err = handle(ctx, request)
		return err
	})
	return response, s.statusError(info.FullMethod, err)
}

// answerStream does the same for streams.
func (s *Server) answerStream(service any, stream grpc.ServerStream, info *grpc.StreamServerInfo, handle grpc.StreamHandler) error {
	return s.statusError(info.FullMethod, recovered(func() error { return handle(service, sizedStream{stream}) }))
}

func (s *Server) statusError(method string, err error) error {
	if err == nil {
		return nil
	}
	f := failureOf(err)
	if f.fault {
		s.options.Logger.Error("request failed", "method", method, "error", err)
	}
	return f.status.Err()
}
