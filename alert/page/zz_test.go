package page
import ("testing";"os";"time";"github.com/chromedp/chromedp")
func TestZZ(t *testing.T){
	base := os.Getenv("ZZ"); if base=="" { t.Skip() }
	for _, v := range [][3]string{{"real-list", "", "document.querySelector('.strip')"},{"real-loop","loops/AIC-204",charted},{"real-watch","watch","document.querySelector('dl')"}} {
	ctx := tab(t, 1400, 1300)
	do(t, ctx, chromedp.Navigate(base+v[1])); wait(t, ctx, v[2]); time.Sleep(5*time.Second)
	b, err := chromedp.Run(ctx, chromedp.CaptureScreenshot()); if err!=nil {t.Fatal(err)}
	os.WriteFile("/tmp/midwatch-screens/"+v[0]+".png", b, 0644)
	}
}
