package main
import ("testing";"fmt")
func TestShow(t *testing.T){
 r:=sampleResult()
 fmt.Println(renderText(newView(r,[]string{"classical","hc1","cr1(quay)"}),120))
 fmt.Println(renderText(newView(r,[]string{"hc1"}),100))
}
