% Readings of one recorded loop by ways that share no code and, but for the index, no
% method with the program:
%   octave-cli -q reading.m            (Debian's octave 7.3, no packages)
% writes octave.csv. With a trend to make (no loop.csv beside it) it simulates one first:
% plant 1.2/(60 s+1) with a dead time of 10 s, PI with gain 1.4 and reset 50 s once a
% second, noise 0.05 %, logged every 5 s in steps of 0.02 %. Steps of load for four
% hours, then one more and a stem that holds until OP is 2 % away.
1;

function loop_csv(name)
  rand("twister", 7); randn("twister", 7);
  kc = 1.4; ti = 50; x = 0; integral = 0; stem = 0; load = 0; op = 0;
  delay = zeros(1, 10); f = fopen(name, "w"); fprintf(f, "t_s,pv,sp,op\n");
  for t = 1:25200
    if t < 14400 && mod(t, 600) == 1, load = 6*(rand - 0.5); end
    if t == 14401, load += 1; end
    if t <= 14400 || abs(op - stem) > 2, stem = op; end
    delay = [delay(2:end) stem + load];
    x += (1 - exp(-1/60))*(1.2*delay(1) - x);
    pv = x + 0.05*randn;
    e = -pv; integral += kc/ti*e; op = kc*e + integral;
    if mod(t, 5) == 0
      fprintf(f, "%d,%.2f,50,%.2f\n", t, 50 + 0.02*round(pv/0.02), 50 + 0.02*round(op/0.02));
    end
  end
  fclose(f);
end

% Sine and triangle with a free peak, each with its best amplitude, per half-cycle
% (He, Wang, Pottmann & Qin 2007, Ind. Eng. Chem. Res. 46, 4549), over all half-cycles.
% Drift goes by a moving mean of one period; a half-cycle lies between the crossings
% that a move beyond 0.3 rms parts.
function si = index(x, p)
  x = x - conv(x, [0.5; ones(p-1, 1); 0.5]/p, "same");
  x = x(p+1:end-p);
  band = 0.3*sqrt(mean(x.^2)); side = 0; zero = 1; cuts = [];
  for i = 2:rows(x)
    if (x(i) > 0) != (x(i-1) > 0), zero = i; end
    s = (x(i) > band) - (x(i) < -band);
    if s && s != side, cuts(end+1) = zero; side = s; end
  end
  sine = tri = 0;
  left = @(y, a) sum((y - a*(a\y)).^2);
  for k = 2:numel(cuts)-1
    y = x(cuts(k):cuts(k+1)-1); u = ((1:rows(y))' - 0.5)/rows(y);
    sine += left(y, sin(pi*u));
    tri += min(arrayfun(@(c) left(y, min(u/c, (1-u)/(1-c))), 0.02:0.01:0.98));
  end
  si = sine/(sine + tri);
end

if !exist("loop.csv", "file"), loop_csv("loop.csv"); end
d = dlmread("loop.csv", ",", 1, 0);
h = 5; e = d(:,3) - d(:,2); op = d(:,4);
out = fopen("octave.csv", "w"); fprintf(out, "name,value\n");

% The law OP = c + Kc e + Kc/Ti Int e over the four hours, by differences over 60 s,
% which take c away; Int e by the trapezoid. Then with the lag -dOP/dt as a third.
n = 14400/h; m = 60/h;
s = [0; cumsum((e(1:n-1) + e(2:n))/2*h)];
over = @(x) x(m+1:n) - x(1:n-m);
a = [over(e) over(s)]; y = over(op); k = a\y;
fprintf(out, "rows,%d\nkc,%.12g\nki,%.12g\nrss,%.12g\n", rows(y), k, sumsq(y - a*k));
g = [0; diff(op(1:n))/h];
a = [a -over(g)]; k3 = a\y;
fprintf(out, "kc_with_lag,%.12g\nki_with_lag,%.12g\nlag_s,%.12g\nrss_with_lag,%.12g\n", k3, sumsq(y - a*k3));

% The period of the sticking cycle, from half an hour after its beginning on: mean
% periodogram of halves that overlap by half, Hann window (Welch 1967, IEEE Trans. Audio
% Electroacoust. 15, 70); the top by a parabola through the logarithms of three lines.
x = e(16200/h+1:end); len = floor(rows(x)/3); w = 0.5 - 0.5*cos(2*pi*(0:len-1)'/len);
pad = 8*len; power = 0;
for from = 1:floor(len/2):rows(x)-len+1
  z = x(from:from+len-1);
  power += abs(fft(w.*(z - mean(z)), pad)).^2;
end
power(1:8*3) = 0;
[~, i] = max(power(1:pad/2)); q = log(power(i-1:i+1));
period = pad*h/(i - 1 + (q(1) - q(3))/(2*(q(1) - 2*q(2) + q(3))));
fprintf(out, "period_s,%.6g\nlag_deg,%.6g\n", period, atand(period/(2*pi*k(1)/k(2))));
p = round(period/h);
fprintf(out, "index_op,%.6g\nindex_e,%.6g\n", index(op(16200/h+1:end), p), index(x, p));
fclose(out);
