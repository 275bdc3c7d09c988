package opcua
import ("testing";"time";"fmt";"os";"syscall";"midwatch/collector")
func TestZZ(t *testing.T){
 if os.Getenv("ZZ")=="" {t.Skip()}
 p:=startPeer(t,"--loops","1500","--bare","--rate","1")
 var b []collector.Binding
 for i:=range 1500 { for r,n:=range []string{"PV","SP","OP"} { b=append(b,collector.Binding{Loop:collector.LoopID(i),Name:tagName(i),Role:collector.Role(r),Address:"nsu=urn:kestrel-fen:plant;s=KF."+tagName(i)+"."+n,Sample:1000}) } }
 cfg:=plainConfig(p.url); cfg.Publish=time.Second
 s,err:=newSource(cfg,"works",3,b,Options{}); if err!=nil{t.Fatal(err)}
 in:=&catch{}
 start:=time.Now()
 go s.Run(t.Context(),in)
 for s.State().Link!="watching" { time.Sleep(10*time.Millisecond)}
 fmt.Println("watching after",time.Since(start))
 cpu:=func() time.Duration { var u syscall.Rusage; syscall.Getrusage(0,&u); return time.Duration(u.Utime.Nano()+u.Stime.Nano())}
 time.Sleep(5*time.Second)
 c0,v0:=cpu(),s.counts.values.Load()
 time.Sleep(15*time.Second)
 v:=s.counts.values.Load()-v0
 fmt.Println("values/s",v/15,"cpu/value",(cpu()-c0)/time.Duration(v)); fmt.Printf("%+v\n",s.State())
}
